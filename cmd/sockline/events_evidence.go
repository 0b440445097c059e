package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"net/http"
	"os/user"
	"strings"
	"unicode"
	"unicode/utf8"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/history/bundle"
	"sockline/sensors"
)

// maxNote bounds what one note may hold, in bytes.
const maxNote = 4096

func eventsNoteCommand() command {
	return command{
		name: "events note", summary: "write a note on an event into the journal", operands: "ID TEXT",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			who := fs.String("who", "", "`NAME` of who writes; without it, that of the user of this machine")
			return func(ctx context.Context, p *program, operands []string) error {
				if len(operands) != 2 {
					return usagef("give the id of an event and one text; put the text into quotes")
				}
				n := history.Note{Event: operands[0], Who: *who, Text: strings.TrimSpace(operands[1])}
				if err := fillNote(&n); err != nil {
					return err
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				seq, err := writeNote(ctx, source.directory, n, sensors.At(p.now()))
				if err != nil {
					return fmt.Errorf("note on event %s: %w", n.Event, err)
				}
				if flags.output.json() {
					return printJSON(p, map[string]any{"record": seq, "event": n.Event, "who": n.Who, "text": n.Text, "notice": alerting.Notice})
				}
				_, err = fmt.Fprintf(p.stdout, "The note of %s on event %s is record %d of the journal.\n%s\n", n.Who, n.Event, seq, alerting.Notice)
				return err
			}
		},
	}
}

// fillNote checks a note and names its writer.
func fillNote(n *history.Note) error {
	switch {
	case n.Text == "":
		return usagef("the note is empty")
	case len(n.Text) > maxNote:
		return usagef("the note has %d bytes; at most %d are kept", len(n.Text), maxNote)
	case !utf8.ValidString(n.Text) || strings.ContainsFunc(n.Text, func(r rune) bool { return unicode.IsControl(r) && r != '\n' && r != '\t' }):
		return usagef("the note holds characters that are no text")
	}
	if n.Who == "" {
		if u, err := user.Current(); err == nil {
			n.Who = u.Username
		}
	}
	if n.Who == "" {
		return usagef("nobody knows who writes: give --who NAME")
	}
	return nil
}

// writeNote records a note: through the daemon, or where none runs in the
// history itself.
func writeNote(ctx context.Context, dir string, n history.Note, at sensors.Instant) (seq uint64, err error) {
	if held(ctx, dir) {
		var answer noted
		err := askHatch(ctx, dir, http.MethodPost, "/notes", n, &answer)
		return answer.Record, err
	}
	look, err := readOnly(dir)
	if err != nil {
		return 0, err // opening it for writing would make a history where none is
	}
	if err := look.Close(); err != nil {
		return 0, err
	}
	a := newArchive(dir, history.Options{}, nil)
	if err := a.open(); err != nil {
		return 0, err
	}
	ctx, cancel := context.WithTimeout(ctx, noteWait)
	defer cancel()
	seq, err = a.note(ctx, a.store, n, at)
	return seq, errors.Join(err, a.close(ctx))
}

func eventsExportCommand() command {
	return command{
		name: "events export", summary: "write everything about an event into a signed archive that can be checked elsewhere", operands: "ID",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			out := fs.String("bundle", "", "`FILE` for the archive, a zip file, which must not exist")
			names := fs.Bool("redact-names", false, "replace the names of people; the archive can still be verified")
			texts := fs.Bool("redact-texts", false, "withhold what people wrote; the archive can still be verified")
			return func(ctx context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one event by its id; \"sockline events list\" lists them")
				}
				if *out == "" {
					return usagef("--bundle is missing: name the archive")
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				o := bundle.Options{Software: softwareText(), RedactNames: *names, RedactTexts: *texts}
				sum, err := exportEvent(ctx, source.directory, operands[0], *out, o)
				if err != nil {
					return err
				}
				return printArchive(p, *out, sum, *names, flags.output.json())
			}
		},
	}
}

// exportEvent writes the archive of an event. Where a daemon holds the
// history, it works on a copy of the days round the event.
func exportEvent(ctx context.Context, dir, id, out string, o bundle.Options) (sum bundle.Summary, err error) {
	span, err := spanOf(ctx, dir, id)
	if err != nil {
		return sum, err
	}
	if o.Key, err = bundle.Key(dir); err != nil {
		return sum, err
	}
	store, done, err := lookInto(ctx, dir, span)
	if err != nil {
		return sum, err
	}
	defer func() { err = errors.Join(err, done()) }()
	err = writeWhole(out, func(w io.Writer) error {
		sum, err = bundle.Write(ctx, w, store, id, o)
		return err
	})
	return sum, err
}

// spanOf is the time whose readings belong to an event.
func spanOf(ctx context.Context, dir, id string) (span backup.Span, err error) {
	store, done, err := lookInto(ctx, dir, backup.Nothing())
	if err != nil {
		return span, err
	}
	e, err := store.Event(id)
	if err == nil {
		span.From = e.Opened.Add(-bundle.Around)
		if e.Closed != 0 {
			span.To = e.Closed.Add(bundle.Around)
		}
	}
	return span, errors.Join(err, done())
}

func printArchive(p *program, out string, sum bundle.Summary, names, asJSON bool) error {
	if sum.Kept > 0 && names {
		fmt.Fprintf(p.stderr, "%d texts that people wrote are kept as they are. Names in them that the journal does not know are still there: read people.jsonl, or add --redact-texts.\n", sum.Kept)
	}
	for _, d := range sum.Damage {
		fmt.Fprintf(p.stderr, "missing in the archive because it is damaged: %s\n", d)
	}
	if asJSON {
		return printJSON(p, struct {
			bundle.Summary
			Out    string `json:"out"`
			Notice string `json:"notice"`
		}{sum, out, alerting.Notice})
	}
	_, err := fmt.Fprintf(p.stdout, "%s holds %d readings from %s to %s, %d issues, %d records of people and %d records of the journal.\n"+
		"It is signed by the key %s.\nThe manifest has the SHA-256 %s.\n%s\n",
		out, sum.Readings, sum.From, sum.To, sum.Issues, sum.People, sum.Links, sum.Key, sum.SHA256, alerting.Notice)
	return err
}
