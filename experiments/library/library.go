// Package library holds ready-to-run studies: study files with consent texts in
// English and German, to be launched as they are for a demonstration or copied
// and adapted.
package library

import (
	"embed"
	"io/fs"

	"distal/experiments/study"
	"distal/experiments/studyfile"
)

//go:embed */study.yaml */texts/*.md
var files embed.FS

// Names are the studies of the library.
func Names() []string {
	entries, err := fs.ReadDir(files, ".")
	if err != nil {
		panic("library: " + err.Error()) // embedded: cannot happen
	}
	var names []string
	for _, e := range entries {
		names = append(names, e.Name())
	}
	return names
}

// Read reads the study called name.
func Read(name string) (*study.Study, study.Problems) {
	return studyfile.Read(files, name+"/study.yaml")
}

// Files are the files of the study called name: study.yaml and texts.
func Files(name string) (fs.FS, error) { return fs.Sub(files, name) }
