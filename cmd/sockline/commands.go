package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/config"
)

// The exit codes.
const (
	exitDone   = 0
	exitFailed = 1
	exitUsage  = 2 // wrong use, or a bad configuration
)

// program is what a command may use of the process that it runs in.
type program struct {
	stdin          io.Reader
	stdout, stderr io.Writer // data; messages, from several goroutines
	now            func() time.Time
}

// action does what a command is for; operands are what follows the flags.
type action func(ctx context.Context, p *program, operands []string) error

// command is one command of the program. The usage text comes from here, so
// that what is documented is what is understood.
type command struct {
	name     string // one word, or two as in "events list"
	summary  string // one line, in the imperative
	operands string // what follows the flags, in the usage line; empty for nothing
	// setup defines the flags, with their help, and returns what to do once
	// they have been read.
	setup func(*flag.FlagSet) action
}

// commands is the table of all commands, in the order of the usage text.
func commands() []command {
	return []command{
		demoCommand(),
		runCommand(),
		checkCommand(),
		simulateCommand(),
		surveyCommand(),
		recordCommand(),
		replayCommand(),
		tryCommand(),
		mastCommand(),
		stationsCommand(),
		eventsListCommand(),
		eventsShowCommand(),
		eventsNoteCommand(),
		eventsExportCommand(),
		historyVerifyCommand(),
		historyBackupCommand(),
		historyExportCommand(),
		eventsReportCommand(),
		historySummaryCommand(),
		usersAddCommand(),
		usersListCommand(),
		usersRemoveCommand(),
		completionCommand(),
		manCommand(),
		versionCommand(),
	}
}

// usageError is a wrong use of the program: the exit code is 2.
type usageError struct{ text string }

// Error is what was wrong.
func (e usageError) Error() string { return e.text }

// usagef makes a usageError.
func usagef(format string, args ...any) error { return usageError{fmt.Sprintf(format, args...)} }

// run does what args say and returns the exit code.
func (p *program) run(ctx context.Context, args []string) int {
	if len(args) == 0 {
		fmt.Fprint(p.stderr, overview())
		return exitUsage
	}
	switch args[0] {
	case "help", "-h", "-help", "--help":
		return p.help(args[1:])
	case "-version", "--version":
		args = []string{"version"}
	}
	c, rest, ok := find(args)
	if !ok {
		fmt.Fprintf(p.stderr, "sockline: there is no command %q; \"sockline help\" lists them\n", strings.Join(args[:min(2, len(args))], " "))
		return exitUsage
	}
	fs := newFlagSet(c)
	act := c.setup(fs)
	operands, err := parse(fs, rest)
	switch {
	case errors.Is(err, flag.ErrHelp):
		fmt.Fprint(p.stdout, usage(c))
		return exitDone
	case err != nil:
		return p.fail(c, usagef("%v", err))
	case c.operands == "" && len(operands) > 0:
		return p.fail(c, usagef("%q stands where only flags are expected", operands[0]))
	}
	return p.fail(c, act(ctx, p, operands))
}

// parse reads flags and operands in any order. After -- everything is an
// operand.
func parse(fs *flag.FlagSet, args []string) (operands []string, err error) {
	for len(args) > 0 {
		if err := fs.Parse(args); err != nil {
			return nil, err
		}
		rest := fs.Args()
		if n := len(args) - len(rest); n > 0 && args[n-1] == "--" {
			return append(operands, rest...), nil
		}
		if len(rest) == 0 {
			break
		}
		operands, args = append(operands, rest[0]), rest[1:]
	}
	return operands, nil
}

// fail reports the error of a command, if there is one, and returns the exit
// code that belongs to it.
func (p *program) fail(c command, err error) int {
	var problems config.Problems
	var wrong usageError
	switch {
	case err == nil:
		return exitDone
	case errors.As(err, &problems):
		fmt.Fprintln(p.stderr, problems.Error())
		return exitUsage
	case errors.As(err, &wrong):
		fmt.Fprintf(p.stderr, "sockline %s: %v\n\"sockline help %s\" explains it\n", c.name, err, c.name)
		return exitUsage
	}
	fmt.Fprintf(p.stderr, "sockline %s: %v\n", c.name, err)
	return exitFailed
}

// help prints the usage of one command, or of all.
func (p *program) help(words []string) int {
	if len(words) == 0 {
		fmt.Fprint(p.stdout, overview())
		return exitDone
	}
	c, _, ok := find(words)
	if !ok {
		fmt.Fprintf(p.stderr, "sockline: there is no command %q; \"sockline help\" lists them\n", strings.Join(words, " "))
		return exitUsage
	}
	fmt.Fprint(p.stdout, usage(c))
	return exitDone
}

// find is the command that args begin with, and what follows its name.
func find(args []string) (command, []string, bool) {
	for _, c := range commands() {
		words := strings.Fields(c.name)
		if len(args) >= len(words) && strings.Join(args[:len(words)], " ") == c.name {
			return c, args[len(words):], true
		}
	}
	return command{}, nil, false
}

// newFlagSet is the empty flag set of a command. It prints nothing itself:
// every message goes through program.fail.
func newFlagSet(c command) *flag.FlagSet {
	fs := flag.NewFlagSet(c.name, flag.ContinueOnError)
	fs.SetOutput(io.Discard)
	fs.Usage = func() {}
	return fs
}

// overview is the usage text of the program.
func overview() string {
	var b strings.Builder
	b.WriteString("sockline takes the readings of anemometers, works out how the headwind changes along\n" +
		"landing and take-off paths, and raises alerts.\n\nUsage: sockline COMMAND [flags]\n\n")
	width := 0
	for _, c := range commands() {
		width = max(width, len(c.name))
	}
	for _, c := range commands() {
		fmt.Fprintf(&b, "  %-*s  %s\n", width, c.name, c.summary)
	}
	b.WriteString("\n\"sockline help COMMAND\" explains one of them. Exit code: 0 done, 1 failed, 2 wrong use\nor bad configuration.\n\n")
	b.WriteString(alerting.Notice + "\n")
	return b.String()
}

// usage is the usage text of one command.
func usage(c command) string {
	fs := newFlagSet(c)
	c.setup(fs)
	var b strings.Builder
	fmt.Fprintf(&b, "Usage: sockline %s", c.name)
	flags := 0
	fs.VisitAll(func(*flag.Flag) { flags++ })
	if flags > 0 {
		b.WriteString(" [flags]")
	}
	if c.operands != "" {
		b.WriteString(" " + c.operands)
	}
	fmt.Fprintf(&b, "\n\n%s.\n", upperFirst(c.summary))
	if flags > 0 {
		b.WriteString("\nFlags:\n")
	}
	fs.VisitAll(func(f *flag.Flag) {
		value, help := flag.UnquoteUsage(f)
		if value != "" {
			value = " " + value
		}
		fmt.Fprintf(&b, "  --%s%s\n      %s", f.Name, value, help)
		if f.DefValue != "" && f.DefValue != "false" && f.DefValue != "0" && f.DefValue != "0s" {
			fmt.Fprintf(&b, " (default %s)", f.DefValue)
		}
		b.WriteString("\n")
	})
	return b.String()
}

func upperFirst(s string) string { return strings.ToUpper(s[:1]) + s[1:] }

// outputFlag defines --output, which every command has that prints something
// for reading.
func outputFlag(fs *flag.FlagSet) *output {
	o := output("text")
	fs.Var(&o, "output", "`FORMAT` of what is printed: text or json")
	return &o
}

// output is the value of --output.
type output string

// String is the format's word.
func (o *output) String() string { return string(*o) }

// Set takes one of the two formats.
func (o *output) Set(s string) error {
	if s != "text" && s != "json" {
		return errors.New("choose text or json")
	}
	*o = output(s)
	return nil
}

func (o *output) json() bool { return *o == "json" }

// configFlag defines --config.
func configFlag(fs *flag.FlagSet) *string {
	return fs.String("config", "", "configuration `FILE`")
}

// loadConfig reads the configuration that a command needs.
func loadConfig(path string) (*config.Config, error) {
	if path == "" {
		return nil, usagef("--config is missing: name the configuration file")
	}
	return config.Load(path)
}
