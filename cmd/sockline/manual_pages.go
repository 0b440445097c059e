package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/config"
)

func manCommand() command {
	return command{
		name: "man", summary: "print a manual page, or write all of them into a directory", operands: "[COMMAND]",
		setup: func(fs *flag.FlagSet) action {
			out := fs.String("out", "", "write every page into this `DIR`, as NAME.1")
			return func(_ context.Context, p *program, operands []string) error {
				date, err := manualDate(p.now, os.Getenv)
				if err != nil {
					return err
				}
				if *out != "" {
					if len(operands) > 0 {
						return usagef("--out writes the pages of all commands: leave %q out", strings.Join(operands, " "))
					}
					return writeManual(*out, date)
				}
				page := overviewPage(date)
				if len(operands) > 0 {
					c, rest, ok := find(operands)
					if !ok || len(rest) > 0 {
						return usagef("there is no command %q", strings.Join(operands, " "))
					}
					page = commandPage(c, date)
				}
				_, err = io.WriteString(p.stdout, page)
				return err
			}
		},
	}
}

// manualDate is the day that the pages carry. SOURCE_DATE_EPOCH sets it, so
// that two builds of one source make the same bytes; else it is that of the
// source, where the build knew it, else today.
func manualDate(now func() time.Time, getenv func(string) string) (string, error) {
	const form = "2006-01-02"
	if text := getenv("SOURCE_DATE_EPOCH"); text != "" {
		seconds, err := strconv.ParseInt(text, 10, 64)
		if err != nil || seconds < 0 {
			return "", usagef("SOURCE_DATE_EPOCH is %q: give the seconds since 1970, or unset it", text)
		}
		return time.Unix(seconds, 0).UTC().Format(form), nil
	}
	if t, err := time.Parse(time.RFC3339, currentBuild().Time); err == nil {
		return t.UTC().Format(form), nil
	}
	return now().UTC().Format(form), nil
}

// pageName is the name of a command's page.
func pageName(c command) string { return "sockline-" + strings.ReplaceAll(c.name, " ", "-") }

// writeManual writes the page of the program and of each command.
func writeManual(dir, date string) error {
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return fmt.Errorf("make the directory of the manual: %w", err)
	}
	pages := map[string]string{"sockline": overviewPage(date)}
	for _, c := range commands() {
		pages[pageName(c)] = commandPage(c, date)
	}
	var failed error
	for name, text := range pages {
		if err := os.WriteFile(filepath.Join(dir, name+".1"), []byte(text), 0o644); err != nil {
			failed = errors.Join(failed, fmt.Errorf("write a manual page: %w", err))
		}
	}
	return failed
}

// roff writes a page in the macros of man(7), the few that every reader of
// manual pages knows.
type roff struct{ strings.Builder }

// newRoff begins a page.
func newRoff(name, date string) *roff {
	r := &roff{}
	fmt.Fprintf(r, ".TH %s 1 %s \"sockline %s\" \"User commands\"\n", roffWord(name), date, roffText(version))
	r.WriteString(".nh\n") // a name that is hyphenated cannot be pasted
	return r
}

// section begins a section.
func (r *roff) section(title string) { fmt.Fprintf(r, ".SH %s\n", roffWord(title)) }

// text is a paragraph's line.
func (r *roff) text(format string, args ...any) {
	r.WriteString(roffText(fmt.Sprintf(format, args...)) + "\n")
}

// tagged is a term and what is said of it. The term is bold; what follows it
// is in italics.
func (r *roff) tagged(term, value, about string) {
	r.WriteString(".TP\n")
	if value == "" {
		fmt.Fprintf(r, ".B %s\n", roffWord(term))
	} else {
		fmt.Fprintf(r, ".BI %s %s\n", roffWord(term), roffWord(" "+value))
	}
	r.text("%s", about)
}

// roffText makes text mean itself: a backslash begins an escape, a period or
// an apostrophe at the start of a line a command, and a bare hyphen may be set
// as a dash that nobody can paste.
func roffText(s string) string {
	s = strings.NewReplacer(`\`, `\e`, "-", `\-`).Replace(s)
	if strings.HasPrefix(s, ".") || strings.HasPrefix(s, "'") {
		s = `\&` + s
	}
	return s
}

// roffWord is one argument of a macro.
func roffWord(s string) string { return `"` + strings.ReplaceAll(roffText(s), `"`, `\(dq`) + `"` }

// overviewPage is the page of the program.
func overviewPage(date string) string {
	r := newRoff("sockline", date)
	r.section("NAME")
	r.text("sockline - headwind changes along landing and take-off paths, from anemometers")
	r.section("SYNOPSIS")
	r.WriteString(".B sockline\n.I COMMAND\n.RI [ flags ]\n")
	r.section("DESCRIPTION")
	r.text("sockline takes the readings of anemometers over MQTT, works out how the headwind changes along " +
		"landing and take-off paths, raises alerts, and keeps a history. Where it cannot see, it says so.")
	r.section("COMMANDS")
	for _, c := range commands() {
		r.tagged(c.name, c.operands, upperFirst(c.summary)+". See "+pageName(c)+"(1).")
	}
	r.tagged("help", "[COMMAND]", "Explain a command, or list them.")
	r.commonEnd()
	r.section("SEE ALSO")
	for i, c := range commands() {
		end := ",\n"
		if i == len(commands())-1 {
			end = "\n"
		}
		fmt.Fprintf(r, ".BR %s (1)%s", roffText(pageName(c)), end)
	}
	return r.String()
}

// commandPage is the page of one command.
func commandPage(c command, date string) string {
	r := newRoff(pageName(c), date)
	r.section("NAME")
	r.text("%s - %s", pageName(c), c.summary)
	r.section("SYNOPSIS")
	fmt.Fprintf(r, ".B %s\n", roffWord("sockline "+c.name))
	all := options(c)
	if len(all) > 0 {
		r.WriteString(".RI [ flags ]\n")
	}
	if c.operands != "" {
		fmt.Fprintf(r, ".I %s\n", roffWord(c.operands))
	}
	r.section("DESCRIPTION")
	r.text("%s.", upperFirst(c.summary))
	if len(all) > 0 {
		r.section("OPTIONS")
	}
	fs := newFlagSet(c)
	c.setup(fs)
	for _, o := range all {
		about := upperFirst(o.help)
		if d := fs.Lookup(o.name).DefValue; d != "" && d != "false" && d != "0" && d != "0s" {
			about += " (default " + d + ")"
		}
		r.tagged("--"+o.name, o.value, about+".")
	}
	r.commonEnd()
	r.section("SEE ALSO")
	r.WriteString(".BR sockline (1)\n")
	return r.String()
}

// commonEnd is what every page says.
func (r *roff) commonEnd() {
	r.section("EXIT STATUS")
	r.text("0: done. 1: failed. 2: wrong use, or a bad configuration.")
	r.section("ENVIRONMENT")
	r.tagged(config.PasswordVariable, "", "The broker's password; it takes the place of password_file.")
	r.tagged("CREDENTIALS_DIRECTORY", "", "Set by the service manager: where the files of LoadCredential are. "+
		"The configuration may begin the name of a file with ${CREDENTIALS_DIRECTORY}/.")
	r.section("FILES")
	r.tagged("/etc/sockline/sockline.toml", "", "The configuration of the service.")
	r.tagged("/var/lib/sockline", "", "The history of the service.")
	r.section("CAUTIONS")
	r.text("%s", alerting.Notice)
}
