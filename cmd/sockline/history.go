package main

import (
	"context"
	"crypto/ed25519"
	"errors"
	"flag"
	"fmt"
	"io"
	"net/http"
	"os"
	"path/filepath"
	"strings"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/history/bundle"
	"sockline/alerting/history/export"
	"sockline/sensors"
)

func historyVerifyCommand() command {
	return command{
		name: "history verify", summary: "check a history, or the archive of an event, for anything that is not as it was written",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			archive := fs.String("bundle", "", "check this `FILE`, which events export made, instead of a history")
			key := fs.String("key", "", "the archive must be signed by this public `KEY`, in hexadecimal")
			head := fs.String("head", "", "the journal must have held `RECORDS:SHA256` at some time, as a daily head published then says")
			return func(ctx context.Context, p *program, _ []string) error {
				if *archive != "" {
					if *flags.config != "" || *flags.directory != "" || *head != "" {
						return usagef("--bundle stands alone, with --key: an archive is checked without the history")
					}
					return verifyArchive(p, *archive, *key, flags.output.json())
				}
				if *key != "" {
					return usagef("--key goes with --bundle")
				}
				known, err := parseHead(*head)
				if err != nil {
					return err
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				return verifyHistory(ctx, p, source.directory, known, flags.output.json())
			}
		},
	}
}

// parseHead reads RECORDS:SHA256; the zero Head for nothing.
func parseHead(text string) (h history.Head, err error) {
	if text == "" {
		return h, nil
	}
	records, sum, ok := strings.Cut(text, ":")
	if n, scanErr := fmt.Sscanf(records+" ", "%d ", &h.Seq); !ok || n != 1 || scanErr != nil || h.Seq == 0 || h.Hash.UnmarshalText([]byte(sum)) != nil {
		return h, usagef("--head %s: write the number of records, a colon and 64 hexadecimal digits", text)
	}
	return h, nil
}

// verifyHistory checks a history, by itself or through the daemon that holds
// it.
func verifyHistory(ctx context.Context, p *program, dir string, known history.Head, asJSON bool) error {
	report, err := reportOn(ctx, dir, known)
	if err != nil {
		return err
	}
	report.Notice = alerting.Notice
	if asJSON {
		err = printJSON(p, report)
	} else {
		err = printReport(p.stdout, report)
	}
	if err == nil && !report.OK() {
		err = fmt.Errorf("%s is not as it was written", dir)
	}
	return err
}

func reportOn(ctx context.Context, dir string, known history.Head) (r history.Report, err error) {
	if held(ctx, dir) {
		err = askHatch(ctx, dir, http.MethodGet, fmt.Sprintf("/verify?records=%d&sha256=%s", known.Seq, known.Hash), nil, &r)
		return r, err
	}
	store, err := readOnly(dir)
	if err != nil {
		return r, err
	}
	r, err = store.VerifyAgainst(known)
	return r, errors.Join(err, store.Close())
}

func printReport(out io.Writer, r history.Report) error {
	var b strings.Builder
	fmt.Fprintf(&b, "journal: %d records, %d of them missing or not as they were written\n", r.Records, r.Broken)
	fmt.Fprintf(&b, "head: %d:%s\n", r.Records, r.Head)
	const most = 7
	for _, h := range r.Heads[max(0, len(r.Heads)-most):] {
		fmt.Fprintf(&b, "  at the end of %s: %d:%s\n", h.Day, h.Seq, h.Hash)
	}
	fmt.Fprintf(&b, "readings: %d days, %d steps\n", r.Days, r.Steps)
	for _, f := range r.Faults {
		fmt.Fprintf(&b, "DAMAGED %s\n", f)
	}
	for _, name := range r.SetAside {
		fmt.Fprintf(&b, "set aside earlier: %s\n", name)
	}
	if r.OK() {
		b.WriteString("Everything is as it was written.\n")
	}
	_, err := fmt.Fprintf(out, "%s%s\n", b.String(), r.Notice)
	return err
}

// verifyArchive checks the archive of an event.
func verifyArchive(p *program, path, key string, asJSON bool) error {
	var trusted ed25519.PublicKey
	if key != "" {
		var err error
		if trusted, err = bundle.ParseKey(key); err != nil {
			return usagef("--key: %v", err)
		}
	}
	f, err := os.Open(path)
	if err != nil {
		return fmt.Errorf("open the archive: %w", err)
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return fmt.Errorf("open the archive: %w", err)
	}
	report, err := bundle.Verify(f, info.Size(), trusted)
	if err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	if asJSON {
		err = printJSON(p, report)
	} else {
		err = printArchiveReport(p.stdout, report)
	}
	if err == nil && !report.OK() {
		err = fmt.Errorf("%s is not as it was made", path)
	}
	return err
}

func printArchiveReport(out io.Writer, r bundle.Report) error {
	var b strings.Builder
	fmt.Fprintf(&b, "event %s, exported by sockline %s\n", r.Event, r.Software)
	fmt.Fprintf(&b, "%d parts; %d records of the journal, %d of them shown; %d words of people withheld\n", r.Parts, r.Records, r.Shown, r.Withheld)
	for _, h := range r.Heads {
		fmt.Fprintf(&b, "  the journal at the end of %s: %d:%s\n", h.Day, h.Seq, h.Hash)
	}
	for _, f := range r.Faults {
		fmt.Fprintf(&b, "WRONG %s\n", f)
	}
	switch {
	case !r.OK():
	case r.Trusted:
		b.WriteString("Everything is as it was made, and signed by the key that was given.\n")
	default:
		fmt.Fprintf(&b, "Everything is as it was made and signed by the key\n  %s\nCompare it with the airfield's own, or give that as --key.\n", r.Key)
	}
	_, err := fmt.Fprintf(out, "%s%s\n", b.String(), r.Notice)
	return err
}

func historyBackupCommand() command {
	return command{
		name: "history backup", summary: "copy a history, also while the daemon runs, and check the copy",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			out := fs.String("out", "", "`PATH` of the copy: a directory, or one file if it ends in .tar; it must not exist")
			return func(ctx context.Context, p *program, _ []string) error {
				if *out == "" {
					return usagef("--out is missing: name the copy")
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				in, err := streamOf(ctx, source.directory, backup.Span{})
				if err != nil {
					return err
				}
				defer in.Close()
				total, done := sizeOf(source.directory), 0
				bar := newProgress(p, "backup")
				res, err := backup.Receive(in, *out, func(n int) {
					done += n
					bar.at(func() float64 { return float64(done) / float64(max(total, 1)) })
				})
				bar.end()
				if err != nil {
					return err
				}
				return printCopy(p, res, flags.output.json())
			}
		},
	}
}

// sizeOf is how many bytes the files of a directory have; a guess is enough.
func sizeOf(dir string) (n int) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return 0
	}
	for _, e := range entries {
		if info, err := e.Info(); err == nil && info.Mode().IsRegular() {
			n += int(info.Size())
		}
	}
	return n
}

func printCopy(p *program, res backup.Result, asJSON bool) error {
	var err error
	if asJSON {
		err = printJSON(p, res)
	} else {
		var b strings.Builder
		for _, f := range res.Files {
			fmt.Fprintf(&b, "%s  %s\n", f.SHA256, f.Name)
		}
		fmt.Fprintf(&b, "%s holds %d bytes; %d records, %d days, %d steps were read back.\n", res.Out, res.Bytes, res.Report.Records, res.Report.Days, res.Report.Steps)
		_, err = fmt.Fprintf(p.stdout, "%s%s\n", b.String(), res.Notice)
	}
	if err == nil && res.Damage != "" {
		err = fmt.Errorf("the copy is made, but what was copied is damaged: %s", res.Damage)
	}
	return err
}

func historyExportCommand() command {
	return command{
		name: "history export", summary: "write stored readings as a table for other programs",
		setup: func(fs *flag.FlagSet) action {
			flags := eventFlags{config: configFlag(fs), directory: fs.String("history", "", "history `DIRECTORY`, instead of the one that the configuration names")}
			format := fs.String("format", "csv", "`FORMAT` of the table: "+strings.Join(export.Formats(), ", "))
			from := instantFlag(fs, "from", "only readings of steps at or after this `TIME`")
			to := instantFlag(fs, "to", "only readings of steps before this `TIME`")
			out := fs.String("out", "", "`FILE` for the table, which must not exist; - is the standard output")
			return func(ctx context.Context, p *program, _ []string) error {
				if err := spanError(*from, *to); err != nil {
					return err
				}
				if *out == "" {
					return usagef("--out is missing: name the file, or - for the standard output")
				}
				if _, err := export.New(*format, io.Discard); err != nil {
					return usagef("--format: %v", err)
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				return exportReadings(ctx, p, source.directory, *format, *out, backup.Span{From: *from, To: *to})
			}
		},
	}
}

// exportReadings writes the table, from a copy where a daemon holds the
// history. A table without the damaged steps is kept, and the error names
// them.
func exportReadings(ctx context.Context, p *program, dir, format, out string, span backup.Span) (err error) {
	store, done, err := lookInto(ctx, dir, span)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, done()) }()
	first, last, err := store.Span()
	if err != nil {
		return err
	}
	first = max(first, span.From)
	to := last + sensors.Second
	if span.To != 0 {
		to = min(to, span.To)
	}
	bar := newProgress(p, "export")
	var sum export.Summary
	fill := func(w io.Writer) error {
		sink, err := export.New(format, w)
		if err != nil {
			return err
		}
		sum, err = export.Readings(ctx, store, span.From, to, sink, func(at sensors.Instant) {
			bar.at(func() float64 { return float64(at-first) / float64(max(to-first, 1)) })
		})
		return err
	}
	if out == "-" {
		err = fill(p.stdout)
	} else {
		err = writeWhole(out, fill)
	}
	bar.end()
	if err != nil {
		return err
	}
	if out != "-" {
		fmt.Fprintf(p.stderr, "%s: %d readings of %d steps\n", filepath.Base(out), sum.Rows, sum.Steps)
	}
	if sum.Damage != nil {
		return fmt.Errorf("the table is made, without what is damaged: %w", sum.Damage)
	}
	return nil
}
