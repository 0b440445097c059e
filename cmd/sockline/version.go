package main

import (
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"runtime"
	"runtime/debug"

	"sockline/alerting"
)

// version is set when a release is linked: -ldflags "-X main.version=1.2.3".
var version = "dev"

// buildInfo says what this program was built from.
type buildInfo struct {
	Version  string `json:"version"`
	Go       string `json:"go"`
	Platform string `json:"platform"`
	Revision string `json:"revision,omitempty"` // of the source, where the build knew it
	Time     string `json:"time,omitempty"`     // of that revision
	Modified bool   `json:"modified,omitempty"` // the source differed from it
	Notice   string `json:"notice"`
}

func currentBuild() buildInfo {
	b := buildInfo{
		Version: version, Go: runtime.Version(), Platform: runtime.GOOS + "/" + runtime.GOARCH, Notice: alerting.Notice,
	}
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return b
	}
	for _, s := range info.Settings {
		switch s.Key {
		case "vcs.revision":
			b.Revision = s.Value
		case "vcs.time":
			b.Time = s.Value
		case "vcs.modified":
			b.Modified = s.Value == "true"
		}
	}
	return b
}

func versionCommand() command {
	return command{
		name: "version", summary: "print the version of the program, of Go and of the build",
		setup: func(fs *flag.FlagSet) action {
			out := outputFlag(fs)
			return func(_ context.Context, p *program, _ []string) error { return printVersion(p, out.json()) }
		},
	}
}

func printVersion(p *program, asJSON bool) error {
	b := currentBuild()
	if asJSON {
		return printJSON(p, b)
	}
	fmt.Fprintf(p.stdout, "sockline %s, %s, %s\n", b.Version, b.Go, b.Platform)
	if b.Revision != "" {
		note := ""
		if b.Modified {
			note = ", with changes"
		}
		fmt.Fprintf(p.stdout, "built from %s of %s%s\n", b.Revision, b.Time, note)
	}
	_, err := fmt.Fprintf(p.stdout, "%s\n", b.Notice)
	return err
}

// printJSON prints a value for another program: one object, two blanks a
// level.
func printJSON(p *program, v any) error {
	e := json.NewEncoder(p.stdout)
	e.SetIndent("", "  ")
	e.SetEscapeHTML(false)
	if err := e.Encode(v); err != nil {
		return fmt.Errorf("print: %w", err)
	}
	return nil
}
