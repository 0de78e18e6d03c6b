package library_test

import (
	"testing"

	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/value"
)

// Every study of the library reads without a problem, and its canonical form
// reads back as the same study.
func TestLibraryReads(t *testing.T) {
	t.Parallel()
	names := library.Names()
	if len(names) < 2 {
		t.Fatalf("studies: %v", names)
	}
	for _, name := range names {
		s, problems := library.Read(name)
		if len(problems) > 0 {
			t.Errorf("%s:\n%v", name, problems)
			continue
		}
		if s.About.Name != name {
			t.Errorf("folder %s holds study %s", name, s.About.Name)
		}
		text, err := value.Canonical(s.Encode())
		if err != nil {
			t.Fatal(err)
		}
		tree, err := value.ParseJSON(text)
		if err != nil {
			t.Fatal(err)
		}
		again, problems := study.Decode(tree)
		if len(problems) > 0 {
			t.Errorf("canonical form of %s:\n%v", name, problems)
			continue
		}
		second, err := value.Canonical(again.Encode())
		if err != nil || string(second) != string(text) {
			t.Errorf("canonical form of %s changes when it is read back", name)
		}
	}
}
