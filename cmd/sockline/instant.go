package main

import (
	"flag"
	"fmt"
	"time"

	"sockline/sensors"
)

// instantFlag defines a flag that takes a moment; 0 until it is given.
func instantFlag(fs *flag.FlagSet, name, usage string) *sensors.Instant {
	at := new(sensors.Instant)
	fs.Func(name, usage, func(s string) error {
		t, err := time.Parse(time.RFC3339, s)
		if err != nil {
			return fmt.Errorf("write a time as 2026-07-01T14:00:00Z")
		}
		*at = sensors.At(t)
		return nil
	})
	return at
}

// spanError says what is wrong with a span of time; nil if nothing.
func spanError(from, to sensors.Instant) error {
	if from != 0 && to != 0 && from >= to {
		return usagef("--from must lie before --to")
	}
	return nil
}
