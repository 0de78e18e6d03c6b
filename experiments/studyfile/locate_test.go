package studyfile_test

import (
	"testing"

	"distal/experiments/study"
	"distal/experiments/studyfile"
)

func TestLocate(t *testing.T) {
	t.Parallel()
	files := baseFiles(t)
	for _, tt := range []struct {
		path         string
		line, column int
	}{
		{"exclusions.catch-trials.when", 101, 11},
		{"exclusions[1].when", 101, 11},
		{"displays.field.coherence", 32, 16},
		{"displays.field.nothing", 31, 5},
		{"blocks[2].catch.set.coherence", 73, 41},
		{"", 2, 1},
	} {
		got := studyfile.Locate(files, studyName, study.Problems{{Path: tt.path, Message: "m"}})[0].Pos
		if got.Line != tt.line || got.Column != tt.column || got.File != studyName {
			t.Errorf("%s: %v, want line %d, column %d", tt.path, got, tt.line, tt.column)
		}
	}
}
