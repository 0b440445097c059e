// Package scenes holds the scene files, so that a program can play them
// without files of its own. Next: sensors/synthetic, which reads them.
package scenes

import (
	"embed"
	"errors"
	"fmt"
	"io/fs"
	"slices"
	"strings"
)

//go:embed *.scene
var files embed.FS

// suffix ends the name of a scene's file.
const suffix = ".scene"

// Names lists the scenes in alphabetical order.
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

// Source is the text of a scene.
func Source(name string) ([]byte, error) {
	source, err := files.ReadFile(name + suffix)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("there is no scene %q; choose one of %s", name, strings.Join(Names(), ", "))
	}
	return source, err
}
