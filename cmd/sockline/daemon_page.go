package main

import (
	"context"
	"crypto/rand"
	"crypto/tls"
	"encoding/hex"
	"fmt"
	"os"
	"strings"
	"sync"
	"time"

	"sockline/alerting/page"
	"sockline/alerting/page/access"
	"sockline/config"
)

// usersEvery is how often the file of users is looked at: whoever is added or
// removed is so within this, and the journal says so.
const usersEvery = 2 * time.Second

// servePage serves the page beside everything else: when it fails, the log
// says so, and alerts go on.
func (d *daemon) servePage(ctx context.Context) error {
	cfg := d.current()
	o := page.Options{
		Airfield: cfg.Airfield.Name, Listen: d.listener.Addr().String(), Exercise: d.opts.exercise,
		View: d.board.view.Load, Tape: d.board.tape, People: d.people, History: d.archive, Registry: d.metrics.registry,
		Review: newReviewer(d), Basis: d.basis,
		Ready: d.notReady, Now: time.Now, Log: d.log,
	}
	var err error
	if o.TLS, err = encryption(cfg.Page); err != nil {
		return err
	}
	if cfg.Page.UsersFile != "" {
		if o.Gate, err = access.NewGate(cfg.Page.UsersFile); err != nil {
			return err
		}
	}
	p, err := page.New(o)
	if err != nil {
		return err
	}
	ctx, cancel := context.WithCancel(ctx)
	var all sync.WaitGroup
	all.Go(func() {
		if err := p.Serve(ctx, d.listener); err != nil {
			d.log.Error().Err(err).Msg("the page is no longer served")
		}
	})
	if o.Gate != nil {
		all.Go(func() { d.watchUsers(ctx, o.Gate) })
	}
	done := make(chan struct{})
	go func() {
		defer close(done)
		all.Wait()
	}()
	d.teardown.add("the page", func(stop context.Context) error {
		cancel()
		return ended(stop, done)
	})
	d.log.Info().Str("url", d.pageURL()).Msg("serving the page")
	return nil
}

// watchUsers keeps in the journal who may log in, and every change of that.
func (d *daemon) watchUsers(ctx context.Context, gate *access.Gate) {
	tick := time.NewTicker(usersEvery)
	defer tick.Stop()
	told := ""
	for {
		changes, err := gate.Changes(time.Now())
		for _, c := range changes {
			d.people.Audit(page.Access{Who: c.Name, What: c.What, From: "the users file", OK: true})
			d.log.Info().Str("user", c.Name).Str("what", c.What).Msg("the users have changed")
		}
		if err != nil && err.Error() != told {
			d.log.Error().Err(err).Msg("the users cannot be read: nobody can log in")
		}
		if told = ""; err != nil {
			told = err.Error()
		}
		select {
		case <-tick.C:
		case <-ctx.Done():
			return
		}
	}
}

// encryption is how the page is encrypted; nil if it is not.
func encryption(p config.Page) (*tls.Config, error) {
	if p.CertFile == "" {
		return nil, nil
	}
	c := &certificate{certFile: p.CertFile, keyFile: p.KeyFile}
	if _, err := c.get(nil); err != nil {
		return nil, err
	}
	return &tls.Config{MinVersion: tls.VersionTLS12, GetCertificate: c.get}, nil
}

// certificateEvery is how often the files of a certificate are looked at.
const certificateEvery = 10 * time.Second

// certificate is that of the page, read again when its files have changed. One
// that cannot be read leaves the one before in use.
type certificate struct {
	certFile, keyFile string

	mu     sync.Mutex
	pair   *tls.Certificate
	looked time.Time
	mod    time.Time
}

func (c *certificate) get(*tls.ClientHelloInfo) (*tls.Certificate, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if c.pair != nil && time.Since(c.looked) < certificateEvery {
		return c.pair, nil
	}
	c.looked = time.Now()
	info, err := os.Stat(c.certFile)
	if c.pair != nil && (err != nil || info.ModTime().Equal(c.mod)) {
		return c.pair, nil
	}
	pair, err := tls.LoadX509KeyPair(c.certFile, c.keyFile)
	switch {
	case err == nil:
		c.pair, c.mod = &pair, info.ModTime()
	case c.pair == nil:
		return nil, fmt.Errorf("read the certificate of the page: %w", err)
	}
	return c.pair, nil
}

// pageURL is where the page is.
func (d *daemon) pageURL() string {
	scheme := "http://"
	if d.current().Page.CertFile != "" {
		scheme = "https://"
	}
	return scheme + d.listener.Addr().String() + "/"
}

// newName makes up a name for something that people make.
func newName(kind string) (string, error) {
	var salt [6]byte
	if _, err := rand.Read(salt[:]); err != nil {
		return "", fmt.Errorf("make up a name: %w", err)
	}
	return strings.Join([]string{kind, hex.EncodeToString(salt[:])}, "-"), nil
}
