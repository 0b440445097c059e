package main

import (
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/quality"
	"sockline/sensors/quantity"
)

func tryCommand() command {
	return command{
		name: "try", summary: "show what a pasted or live message of a station decodes to, and why not",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			id := fs.String("station", "", "`ID` of the station whose message it is")
			var payloads payloadList
			fs.Var(&payloads, "payload", "`TEXT` of a message, @FILE, hex:DIGITS, or - for standard input; several make several messages. For a\n"+
				"      station with a topic for each quantity it begins with speed:, direction: or gust:. Listens to the broker unless given")
			length := fs.Duration("for", 15*time.Second, "how `LONG` to listen to the broker")
			out := outputFlag(fs)
			return func(ctx context.Context, p *program, _ []string) error {
				c, err := loadConfig(*cfg)
				if err != nil {
					return err
				}
				t, err := newTrial(p, c, *id, out.json())
				if err != nil {
					return err
				}
				if len(payloads) == 0 {
					return t.live(ctx, *length)
				}
				return t.pasted(payloads)
			}
		},
	}
}

// given reports whether a flag stands on the command line.
func given(fs *flag.FlagSet, name string) bool {
	found := false
	fs.Visit(func(f *flag.Flag) { found = found || f.Name == name })
	return found
}

// The outcomes of a trial.
const (
	outcomeReading  = "reading"  // the wind was understood
	outcomeNothing  = "nothing"  // the message is in order, but holds no wind
	outcomeRejected = "rejected" // the message was refused
)

// trialResult is what one message decodes to.
type trialResult struct {
	Station  string         `json:"station"`
	Outcome  string         `json:"outcome"`
	Why      string         `json:"why"`
	Readings []trialReading `json:"readings"`
	Received string         `json:"received"`
	Notice   string         `json:"notice"`
}

// trialReading is one reading, as the rest of the program sees it.
type trialReading struct {
	Speed     float64  `json:"speed_ms"`
	Direction float64  `json:"direction_deg"` // where the wind comes from
	Reference string   `json:"reference"`     // what the direction is counted from
	Time      string   `json:"time"`
	Gust      *float64 `json:"gust_ms,omitempty"`
	Exercise  bool     `json:"exercise"`
}

// trial decodes messages of one station.
type trial struct {
	p         *program
	cfg       *config.Config
	station   sensors.Station
	decoder   *decode.Decoder
	variation float64
	json      bool
}

// newTrial prepares the decoding of one station's messages, as the daemon
// would decode them.
func newTrial(p *program, cfg *config.Config, id string, asJSON bool) (*trial, error) {
	i := slices.IndexFunc(cfg.Stations, func(s sensors.Station) bool { return s.ID == id })
	if i < 0 {
		ids := make([]string, len(cfg.Stations))
		for k, s := range cfg.Stations {
			ids[k] = s.ID
		}
		return nil, usagef("--station %q: there is no such station; there are %s", id, strings.Join(ids, ", "))
	}
	decoder, err := decode.New(cfg.Stations[i], i)
	if err != nil {
		return nil, fmt.Errorf("station %s: %w", id, err)
	}
	ids := make([]string, len(cfg.Stations))
	for k, s := range cfg.Stations {
		ids[k] = s.ID
	}
	decoder.Beware(ids)
	t := &trial{p: p, cfg: cfg, station: cfg.Stations[i], decoder: decoder, json: asJSON}
	if t.variation, err = cfg.Airfield.Variation(p.now()); err != nil && t.station.North == sensors.NorthMagnetic {
		return nil, fmt.Errorf("station %s counts from magnetic north: %w", id, err)
	}
	return t, nil
}

// live tries the messages that the broker delivers.
func (t *trial) live(ctx context.Context, length time.Duration) error {
	l, err := listen(context.WithoutCancel(ctx), t.cfg, "sockline-try", t.station.AllTopics())
	if err != nil {
		return err
	}
	defer l.close()
	fmt.Fprintf(t.p.stderr, "waiting %v for messages on %s\n", length, strings.Join(t.station.AllTopics(), ", "))
	timer := time.NewTimer(length)
	defer timer.Stop()
	for messages := 0; ; {
		select {
		case m := <-l.sub.Messages():
			messages++
			if err := t.show(m, true); err != nil {
				return err
			}
		case s := <-l.states:
			fmt.Fprintf(t.p.stderr, "broker %s: %s\n", t.cfg.Broker.Address, linkWords(s))
		case <-ctx.Done():
			return nil
		case <-timer.C:
			if messages > 0 {
				return nil
			}
			s := l.sub.State()
			if !s.Subscribed {
				return noContact(t.cfg, s)
			}
			return fmt.Errorf("nothing came on the topic %s within %v: is the station on, and is this the topic it publishes on?",
				strings.Join(t.station.AllTopics(), ", "), length)
		}
	}
}

// show decodes a message and prints what came of it. A live one is also judged
// by its stamps, as the daemon would.
func (t *trial) show(m sensors.Message, live bool) error {
	readings, err := t.decoder.Decode(nil, m, t.variation)
	return t.tell(readings, err, m.Received, live)
}

// tell prints what came of a message, or of several that belong together.
func (t *trial) tell(readings []sensors.Reading, err error, received sensors.Instant, live bool) error {
	r := trialResult{
		Station: t.station.ID, Outcome: outcomeReading, Readings: make([]trialReading, 0, len(readings)),
		Received: received.String(), Notice: alerting.Notice,
	}
	var all decode.Rejections
	switch {
	case err != nil && !errors.As(err, &all):
		return fmt.Errorf("decode: %w", err)
	case len(readings) > 0 && err != nil:
		r.Why = "a part of the message gives no reading: " + all.Error()
	case len(readings) > 0:
	case all.Refused():
		r.Outcome, r.Why = outcomeRejected, all.Error()
	case err != nil:
		r.Outcome, r.Why = outcomeNothing, all.Error()
	case len(t.decoder.Waiting()) > 0:
		r.Outcome = outcomeNothing
		r.Why = fmt.Sprintf("in order: the %s is kept; a reading comes of it when the rest arrives within %v",
			strings.Join(t.decoder.Waiting(), " and the "), decode.JoinWithin)
	default:
		r.Outcome, r.Why = outcomeNothing, "the message is in order, but speaks of no wind"
	}
	var remarks []string
	for _, reading := range readings {
		r.Readings = append(r.Readings, trialReadingOf(reading))
		if remark := t.remark(reading, live); remark != "" && !slices.Contains(remarks, remark) {
			remarks = append(remarks, remark)
		}
	}
	if r.Why != "" {
		remarks = append([]string{r.Why}, remarks...)
	}
	r.Why = strings.Join(remarks, "; ")
	return t.print(r)
}

// trialReadingOf is a reading as it is printed.
func trialReadingOf(r sensors.Reading) trialReading {
	// Three decimals of a m/s and of a degree: what is behind them is the
	// rounding of a unit.
	round := func(x float64) float64 { return math.Round(x*1000) / 1000 }
	out := trialReading{
		Speed: round(r.Speed), Direction: round(r.From), Reference: string(sensors.NorthTrue),
		Time: r.Time.String(), Exercise: r.Exercise,
	}
	if r.HasGust {
		gust := round(r.Gust)
		out.Gust = &gust
	}
	return out
}

// remark is what keeps a reading from being evaluated by the daemon, though it
// could be decoded; empty if nothing does.
func (t *trial) remark(r sensors.Reading, live bool) string {
	if live {
		// Exercise is judged below, in words of its own.
		if reason, ok := quality.Arrival(r, t.cfg.Analysis.Lateness, true); !ok {
			return fmt.Sprintf("the daemon would not evaluate it (%s): measured %s, arrived %s", reason, r.Time, r.Arrival)
		}
	}
	if r.Exercise {
		return "it marks itself as an exercise: only a daemon started with --exercise takes it"
	}
	return ""
}

// print prints a result: as one line of JSON, so that live ones can be told
// apart, or as sentences.
func (t *trial) print(r trialResult) error {
	if t.json {
		e := json.NewEncoder(t.p.stdout)
		e.SetEscapeHTML(false)
		return e.Encode(r)
	}
	w := t.p.stdout
	switch r.Outcome {
	case outcomeReading:
		for _, x := range r.Readings {
			fmt.Fprintf(w, "%s: %.1f m/s (%.1f kt) from %.0f degrees true", r.Station, x.Speed, quantity.Knots(x.Speed), x.Direction)
			if t.station.North == sensors.NorthMagnetic {
				fmt.Fprintf(w, " (sent from magnetic north, variation %+.1f deg)", t.variation)
			}
			if x.Gust != nil {
				fmt.Fprintf(w, ", gust %.1f m/s (%.1f kt)", *x.Gust, quantity.Knots(*x.Gust))
			}
			fmt.Fprintf(w, ", measured %s\n", x.Time)
		}
	case outcomeNothing:
		fmt.Fprintf(w, "%s: no wind in this message\n", r.Station)
	case outcomeRejected:
		fmt.Fprintf(w, "%s: refused\n", r.Station)
	}
	if r.Why != "" {
		fmt.Fprintf(w, "  %s\n", r.Why)
	}
	_, err := fmt.Fprintf(w, "%s\n", r.Notice)
	return err
}
