package main

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/config"
	"sockline/sensors"
)

// inForce is a configuration as the journal has it.
type inForce struct {
	from   sensors.Instant // the first step that it judges
	start  bool            // the daemon was started with it; else it was reloaded
	source []byte
	hash   string
}

// configurationsOf lists the configurations of the journal in their order.
func configurationsOf(store *history.Store) ([]inForce, error) {
	var all []inForce
	last := uint64(0) // where the last of them stands
	err := store.Journal(1, func(rec history.Record) error {
		switch rec.Kind {
		case history.KindConfiguration:
			sum := sha256.Sum256(rec.Payload)
			all = append(all, inForce{from: rec.At, source: bytes.Clone(rec.Payload), hash: hex.EncodeToString(sum[:])})
			last = rec.Seq
		case history.KindStart:
			if n := len(all); n > 0 && rec.Seq == last+1 {
				all[n-1].start = true
			}
		}
		return nil
	})
	return all, err
}

// parse reads a recorded configuration.
func (c inForce) parse() (*config.Config, error) {
	cfg, problems := config.ParseRecorded("the configuration of "+c.from.String(), c.source)
	if len(problems) > 0 {
		return nil, problems
	}
	return cfg, nil
}

// lastRecorded is the configuration that was last in force in a history, for a
// replay that is given none.
func lastRecorded(dir string) (*config.Config, error) {
	store, err := openForReplay(dir)
	if err != nil {
		return nil, err
	}
	all, err := configurationsOf(store)
	if closed := store.Close(); err == nil {
		err = closed
	}
	switch {
	case err != nil:
		return nil, fmt.Errorf("look for the configuration in the history: %w", err)
	case len(all) == 0:
		return nil, usagef("--config is missing, and the history holds no configuration: name the file")
	}
	return all[len(all)-1].parse()
}

// follow decides by which configurations a history is replayed. When the one
// given is that which was last in force, every step is judged by what was in
// force at it; any other is a question of its own, and serves throughout.
func (h *historyReplay) follow(all []inForce) {
	if len(all) == 0 {
		return
	}
	if all[len(all)-1].hash == h.cfg.Hash {
		h.plan = all
		return
	}
	h.note("%s serves throughout; it is not the configuration that was last in force, which has the SHA-256 %.12s", h.cfg.File, all[len(all)-1].hash)
}

// turn puts in force what the daemon had in force at the step t. Nothing that
// is issued by it is told yet.
func (h *historyReplay) turn(t sensors.Instant) ([]lifecycle.Transition, error) {
	var found *inForce
	for len(h.plan) > 0 && h.plan[0].from <= t {
		found, h.plan = &h.plan[0], h.plan[1:]
	}
	if found == nil || found.hash == h.cfg.Hash {
		return nil, nil
	}
	cfg, err := found.parse()
	if err != nil {
		h.note("a configuration that was in force from %s on is passed over, the one before it stays: %v", found.from, err)
		return nil, nil
	}
	next, err := engine.New(engineSettings(cfg, h.exercise))
	if err != nil {
		return nil, fmt.Errorf("prepare the engine for the configuration of %s: %w", found.from, err)
	}
	begun := h.engine.LastStep() != 0
	closed := h.engine.Reload(next)
	h.use(cfg)
	switch {
	case !begun:
		h.note("the replay begins with the configuration that was in force then (SHA-256 %.12s)", cfg.Hash)
	case found.start:
		h.note("the configuration changes at the step %s (SHA-256 %.12s), with a start of the daemon; if masts changed, the daemon may have judged the first 20 minutes after it otherwise", t, cfg.Hash)
	default:
		h.note("the configuration changes at the step %s (SHA-256 %.12s), as it was reloaded then", t, cfg.Hash)
	}
	return closed, nil
}

// use makes a configuration the one that is replayed by.
func (h *historyReplay) use(cfg *config.Config) {
	h.cfg, h.words = cfg, wordingContext(cfg, h.exercise)
	h.ids = make([]string, len(cfg.Stations))
	for i, s := range cfg.Stations {
		h.ids[i] = s.ID
	}
}
