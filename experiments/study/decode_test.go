package study_test

import (
	"bytes"
	"testing"

	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/value"
)

func canonicalOf(t testing.TB, s *study.Study) []byte {
	t.Helper()
	text, err := value.Canonical(s.Encode())
	if err != nil {
		t.Fatal(err)
	}
	return text
}

// A bundle's study comes from elsewhere: whatever it is, reading it ends
// without a panic, and what is accepted reads back as itself.
func FuzzDecode(f *testing.F) {
	for _, name := range library.Names() {
		s, problems := library.Read(name)
		if problems.Failed() {
			f.Fatal(problems)
		}
		f.Add(canonicalOf(f, s))
	}
	f.Add([]byte(`{"about":{"languages":["en"]},"blocks":[{}],"displays":{"a":{"kind":"dots"}},"distal":1,"tasks":{"a":{"display":"a"}}}`))
	f.Fuzz(func(t *testing.T, text []byte) {
		tree, err := value.ParseJSON(text)
		if err != nil {
			return
		}
		s, problems := study.Decode(tree)
		if problems.Failed() {
			return
		}
		first := canonicalOf(t, s)
		tree, err = value.ParseJSON(first)
		if err != nil {
			t.Fatal(err)
		}
		again, problems := study.Decode(tree)
		if problems.Failed() {
			t.Fatalf("the canonical form is refused:\n%v", problems)
		}
		if second := canonicalOf(t, again); !bytes.Equal(first, second) {
			t.Fatalf("the canonical form changes:\n%s\n%s", first, second)
		}
	})
}

func TestLanguages(t *testing.T) {
	t.Parallel()
	for given, expect := range map[string]bool{
		"en": true, "de": true, "pt-BR": true, "zh-Hant-TW": true, "gsw": true, "es-419": true,
		"": false, "e": false, "english": false, "EN": false, "en_US": false, "en-": false, "../en": false, "en/x": false, "é": false,
	} {
		if got := study.ValidLanguage(given); got != expect {
			t.Errorf("%q: %v", given, got)
		}
	}
}

// Statements are what participants tick, so nothing else may become one.
func TestStatements(t *testing.T) {
	t.Parallel()
	got := study.Statements("# Title\n\n- One\n* Two\n  - indented is part of Two\n-none\n-\n- Last")
	want := []string{"One", "Two", "Last"}
	if len(got) != len(want) {
		t.Fatalf("%q", got)
	}
	for i := range want {
		if got[i] != want[i] {
			t.Errorf("%q, want %q", got[i], want[i])
		}
	}
}
