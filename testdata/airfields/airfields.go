// Package airfields holds the configurations of the invented airfields, so
// that a program can use them without files of its own. Next: config, which
// reads them.
package airfields

import (
	"embed"
	"errors"
	"fmt"
	"io/fs"
	"slices"
	"strings"
)

//go:embed *.toml
var files embed.FS

// suffix ends the name of an airfield's file.
const suffix = ".toml"

// Names lists the airfields in alphabetical order.
func Names() []string {
	entries, err := fs.ReadDir(files, ".")
	if err != nil {
		return nil // an embedded root can always be read
	}
	var names []string
	for _, entry := range entries {
		names = append(names, strings.TrimSuffix(entry.Name(), suffix))
	}
	slices.Sort(names)
	return names
}

// Source is the text of an airfield's configuration.
func Source(name string) ([]byte, error) {
	source, err := files.ReadFile(name + suffix)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("there is no airfield %q; choose one of %s", name, strings.Join(Names(), ", "))
	}
	return source, err
}
