package main

import (
	"context"
	"flag"
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
	log := zerolog.New(p.stderr).Level(zerolog.InfoLevel).With().Timestamp().Logger()
	stop := refuseReload(log)
	defer stop()
	d, err := newDaemon(cfg, daemonOptions{
		exercise: exercise, capture: capture, clock: feed.NewClock(), log: log, notify: notify,
	})
	if err != nil {
		return err
	}
	log.Info().Str("version", version).Str("instance", d.instance).Str("airfield", cfg.Airfield.ID).
		Str("configuration", cfg.File).Bool("exercise", exercise).Msg("sockline starts")
	err = d.Run(ctx)
	log.Info().Msg("sockline has stopped")
	return err
}

// refuseReload answers SIGHUP, which by default would end the program, with a
// line in the log: a changed configuration needs a restart.
func refuseReload(log zerolog.Logger) (stop func()) {
	hups, done := make(chan os.Signal, 1), make(chan struct{})
	signal.Notify(hups, syscall.SIGHUP)
	go func() {
		for {
			select {
			case <-hups:
				log.Warn().Msg("SIGHUP: the configuration is not read again while the program runs; restart it to put a changed file in force. Open alerts go on over a restart")
			case <-done:
				return
			}
		}
	}()
	return func() {
		signal.Stop(hups)
		close(done)
	}
}
