package main

import (
	"context"
	"flag"
	"io"
	"os"
	"os/signal"
	"syscall"

	"github.com/rs/zerolog"

	"sockline/sensors/feed"
)

func runCommand() command {
	return command{
		name: "run", summary: "run the daemon: readings in, alerts out, until it is told to stop",
		setup: func(fs *flag.FlagSet) action {
			path := configFlag(fs)
			capture := fs.String("capture", "", "also write the messages, as seen and stamped, to a new `FILE`")
			exercise := fs.Bool("exercise", false, "take readings that mark themselves as synthetic, and mark everything that goes out")
			return func(ctx context.Context, p *program, _ []string) error {
				return runDaemon(ctx, p, *path, *capture, *exercise)
			}
		},
	}
}

// runDaemon runs until ctx is done, which a signal brings about.
func runDaemon(ctx context.Context, p *program, path, capture string, exercise bool) error {
	cfg, err := loadConfig(path)
	if err != nil {
		return err
	}
	notify, err := newNotifier(os.Getenv)
	if err != nil {
		return err
	}
	defer notify.close()
	signal.Ignore(syscall.SIGPIPE) // a reader of the log that goes away takes the log with it, and no more
	lines := newLogQueue(p.stderr)
	defer func() {
		if !lines.flush(logPatience) {
			p.stderr = io.Discard // the end, too, waits for no reader
		}
	}()
	log := zerolog.New(lines).Level(zerolog.InfoLevel).With().Timestamp().Logger()
	hups, deaf := hangups()
	defer deaf()
	d, err := newDaemon(cfg, daemonOptions{
		exercise: exercise, capture: capture, clock: feed.NewClock(), log: log, lines: lines, notify: notify,
	})
	if err != nil {
		return err
	}
	log.Info().Str("version", version).Str("instance", d.instance).Str("airfield", cfg.Airfield.ID).
		Str("configuration", cfg.File).Bool("exercise", exercise).Msg("sockline starts")
	stop := d.reloadOnHangup(path, hups)
	err = d.Run(ctx)
	stop()
	log.Info().Msg("sockline has stopped")
	return err
}
