// Package main is the program sockline: the command line comes in, and what
// the command does goes out. It reads files and clocks, joins the packages of
// sensors and alerting, and holds no method of its own; what a command needs
// beyond wiring belongs to those packages. Next: nothing; this is where the
// flow ends.
package main

import (
	"context"
	"io"
	"os"
	"os/signal"
	"syscall"
	"time"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	// Once a first signal has ended ctx, the next one has its usual effect: a
	// command that does not end can still be ended.
	context.AfterFunc(ctx, stop)
	os.Exit(run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

// run is the program without its process: args are the words after its name,
// and the result is the exit code.
func run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	p := program{stdin: stdin, stdout: stdout, stderr: stderr, now: time.Now}
	return p.run(ctx, args)
}
