package studyfile_test

import (
	"bytes"
	"path/filepath"
	"testing"
	"testing/fstest"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"github.com/rogpeppe/go-internal/txtar"

	"distal/experiments/display"
	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/studyfile"
	"distal/experiments/value"
)

// Whatever the text, reading it ends without a panic and every problem has a
// place and a message; a study that is accepted has a canonical form that
// reads back as itself.
func FuzzRead(f *testing.F) {
	base := baseFiles(f)
	f.Add(base[studyName].Data)
	names, err := filepath.Glob("testdata/broken/*.txtar")
	if err != nil {
		f.Fatal(err)
	}
	for _, name := range names {
		archive, err := txtar.ParseFile(name)
		if err != nil {
			f.Fatal(err)
		}
		text := base[studyName].Data
		for i, file := range archive.Files {
			if file.Name == "cut" {
				text = bytes.Replace(text, bytes.TrimSuffix(file.Data, []byte("\n")), bytes.TrimSuffix(archive.Files[i+1].Data, []byte("\n")), 1)
			}
		}
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		files := fstest.MapFS{}
		for name, file := range base {
			files[name] = file
		}
		files[studyName] = &fstest.MapFile{Data: text}
		s, problems := studyfile.Read(files, studyName)
		for _, p := range problems {
			if p.Message == "" {
				t.Errorf("a problem without a message at %v", p.Pos)
			}
		}
		if problems.Failed() {
			return
		}
		readsBack(t, s)
	})
}

// readsBack checks that the canonical form of s decodes to a study with the same canonical form.
func readsBack(t *testing.T, s *study.Study) {
	t.Helper()
	first, err := value.Canonical(s.Encode())
	if err != nil {
		t.Fatal(err)
	}
	tree, err := value.ParseJSON(first)
	if err != nil {
		t.Fatalf("%v in %s", err, first)
	}
	again, problems := study.Decode(tree)
	if problems.Failed() {
		t.Fatalf("the canonical form is refused:\n%v\n%s", problems, first)
	}
	second, err := value.Canonical(again.Encode())
	if err != nil || !bytes.Equal(first, second) {
		t.Fatalf("the canonical form changes:\n%s\n%s", first, second)
	}
	sameKind := cmp.Comparer(func(a, b *display.Kind) bool { return a == b })
	if diff := cmp.Diff(s, again, sameKind, cmpopts.EquateEmpty()); diff != "" {
		t.Fatalf("the study of the bundle is not that of the file (-file +bundle):\n%s", diff)
	}
}

// The study that a browser reads from a bundle is in everything, also in the
// order of things, the study of the file: else their trials would differ.
func TestCanonicalFormReadsBack(t *testing.T) {
	t.Parallel()
	s, problems := studyfile.Read(baseFiles(t), studyName)
	if problems.Failed() {
		t.Fatal(problems)
	}
	readsBack(t, s)
	for _, name := range library.Names() {
		s, problems := library.Read(name)
		if problems.Failed() {
			t.Fatal(problems)
		}
		readsBack(t, s)
	}
}
