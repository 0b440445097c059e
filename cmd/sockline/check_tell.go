package main

import (
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"strings"

	"sockline/config"
)

// checkTold is a receiver besides the readers of MQTT topics.
type checkTold struct {
	Name      string `json:"name"`
	Where     string `json:"where"` // host of a webhook, directory of a spool, level of a topic; no address, which may hold a token
	Format    string `json:"format"`
	Sealed    bool   `json:"sealed"`
	Heartbeat bool   `json:"heartbeat"`
	Exercise  bool   `json:"exercise"`
}

// told lists who is told, and warns of what will not work for the user that
// runs the check.
func (r *checkReport) told(cfg *config.Config) {
	if cfg.CAP.Topic != "" {
		r.Told = append(r.Told, checkTold{Name: "topic", Where: cfg.MQTT.Prefix + "/" + cfg.CAP.Topic, Format: "cap"})
	}
	if cfg.CAP.Spool != "" {
		r.Told = append(r.Told, checkTold{Name: "spool", Where: cfg.CAP.Spool, Format: "cap"})
		r.writable("the spool of standard alert messages", cfg.CAP.Spool)
	}
	for _, w := range cfg.Webhooks {
		t := checkTold{Name: w.Name, Format: string(w.Format), Sealed: w.Secret != "", Heartbeat: w.Heartbeat, Exercise: w.Exercise}
		if u, err := url.Parse(w.URL); err == nil { // it was parsed before
			t.Where = u.Host
		}
		r.Told = append(r.Told, t)
		if !t.Sealed {
			r.warn("What is sent to the webhook %s is not sealed: whoever knows its address can send it alerts, too. Give it a secret_file.", w.Name)
		}
	}
	if len(r.Told) > 0 {
		r.writable("the history, which keeps what waits for receivers,", cfg.History.Directory)
	}
}

// writable warns of a directory in which nothing can be made.
func (r *checkReport) writable(what, dir string) {
	if err := tryToWrite(dir); err != nil {
		r.warn("The directory of %s cannot be written by the user that runs this check: %v. Give it to the user that runs sockline.", what, err)
	}
}

// tryToWrite makes a file and takes it away again, in a directory or, where it
// is yet to be made, in the nearest that is there.
func tryToWrite(dir string) error {
	for {
		_, err := os.Stat(dir)
		if err == nil {
			break
		}
		above := filepath.Dir(dir)
		if !errors.Is(err, fs.ErrNotExist) || above == dir {
			return err
		}
		dir = above
	}
	f, err := os.CreateTemp(dir, ".sockline-check-*")
	if err != nil {
		return err
	}
	return errors.Join(f.Close(), os.Remove(f.Name()))
}

// printTold writes who is told.
func (r checkReport) printTold(b *strings.Builder) {
	if len(r.Told) == 0 {
		return
	}
	b.WriteString("\nTold of alerts, besides those who read the topics of MQTT\n")
	for _, t := range r.Told {
		var more []string
		if t.Sealed {
			more = append(more, "sealed")
		}
		if t.Heartbeat {
			more = append(more, "with a heartbeat")
		}
		if t.Exercise {
			more = append(more, "exercises, too")
		}
		fmt.Fprintf(b, "  %-12s %s\n", t.Name, strings.Join(append([]string{t.Where, t.Format}, more...), ", "))
	}
}
