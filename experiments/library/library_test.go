package library_test

import (
	"strconv"
	"strings"
	"testing"

	"distal/experiments/display"
	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/value"
)

// Every kind of display has a study that shows it.
func TestEveryDisplayHasAStudy(t *testing.T) {
	t.Parallel()
	shown := map[string]bool{}
	for _, name := range library.Names() {
		s, problems := library.Read(name)
		if problems.Failed() {
			t.Fatalf("%s:\n%v", name, problems)
		}
		for i := range s.Displays {
			shown[s.Displays[i].Kind.Name] = true
		}
	}
	for _, k := range display.Kinds() {
		if !shown[k.Name] {
			t.Errorf("no study shows %s", k.Name)
		}
	}
}

// What 45 CFR 46.116(b) and Art. 7 and 13 GDPR ask of every information text,
// by the words that say it in ours: purpose, duration, procedures, risks,
// benefits, confidentiality, contact, voluntariness, withdrawal, and that a
// board must approve it before use.
func TestInformationIsComplete(t *testing.T) {
	t.Parallel()
	elements := map[string][]string{
		"en": {"## Why we do this", "It takes about", "## What you will do", "## Risks", "migraine", "seizure", "Escape key", "## Benefits and payment", "## Your data", "Taking part is up to you", "withdraw", "## Questions", "replace before use", "ethics board"},
		"de": {"## Warum wir das tun", "Das dauert etwa", "## Was Sie tun", "## Risiken", "Migräne", "Anfall", "Escape-Taste", "## Nutzen und Bezahlung", "## Ihre Daten", "freiwillig", "widerrufen", "## Fragen", "vor der Verwendung", "Ethikkommission"},
	}
	for _, name := range library.Names() {
		s, problems := library.Read(name)
		if problems.Failed() {
			t.Fatalf("%s:\n%v", name, problems)
		}
		if len(s.Texts) != len(elements) {
			t.Errorf("%s: texts in %d languages", name, len(s.Texts))
		}
		for _, text := range s.Texts {
			minutes := " " + strconv.FormatFloat(s.About.Minutes, 'f', -1, 64) + map[string]string{"en": " minutes", "de": " Minuten"}[text.Language]
			for _, words := range append([]string{s.About.Contact, minutes}, elements[text.Language]...) {
				if !strings.Contains(text.Information, words) {
					t.Errorf("%s: the information in %s does not say %q", name, text.Language, words)
				}
			}
			if n := len(study.Statements(text.Consent)); n < 4 {
				t.Errorf("%s: the consent in %s has %d statements", name, text.Language, n)
			}
		}
	}
}

// Every study of the library reads without a problem, and its canonical form
// reads back as the same study.
func TestLibraryReads(t *testing.T) {
	t.Parallel()
	names := library.Names()
	if len(names) < len(display.Kinds()) {
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
