//go:build !wasip1

package study_test

import (
	"fmt"
	"io/fs"
	"slices"
	"strings"
	"testing"

	"distal/experiments/display"
	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/studyfile"
	"distal/experiments/value"
)

// violations lists where v breaks schema. It knows the keywords of JSON Schema
// 2020-12 that study.JSONSchema uses and panics at any other, so that nothing
// passes unchecked.
func violations(schema, v value.Value, at string) []string {
	var bad []string
	add := func(format string, args ...any) { bad = append(bad, at+": "+fmt.Sprintf(format, args...)) }
	for _, m := range schema.Members {
		switch rule := m.Value; m.Key {
		case "$schema", "title", "description", "default", "additionalProperties":
		case "type":
			if !hasType(rule, v) {
				add("not of type %v %v", rule.Str, rule.Items)
			}
		case "minimum":
			if v.Kind == value.Numeric && v.Num < rule.Num {
				add("%v is below %v", v.Num, rule.Num)
			}
		case "maximum":
			if v.Kind == value.Numeric && v.Num > rule.Num {
				add("%v is above %v", v.Num, rule.Num)
			}
		case "minLength":
			if v.Kind == value.Text && float64(len([]rune(v.Str))) < rule.Num {
				add("shorter than %v", rule.Num)
			}
		case "minItems":
			if v.Kind == value.Sequence && float64(len(v.Items)) < rule.Num {
				add("fewer than %v", rule.Num)
			}
		case "enum":
			if !slices.ContainsFunc(rule.Items, func(x value.Value) bool { return x.Str == v.Str && v.Kind == value.Text }) {
				add("%q is not in the list", v.Str)
			}
		case "const":
			if v.Kind != value.Text || v.Str != rule.Str {
				add("not %q", rule.Str)
			}
		case "anyOf", "oneOf":
			fits := 0
			var last []string
			for _, option := range rule.Items {
				if more := violations(option, v, at); len(more) == 0 {
					fits++
				} else if last == nil || len(more) < len(last) {
					last = more
				}
			}
			if fits == 0 || m.Key == "oneOf" && fits != 1 {
				add("%d of %s fit; nearest: %v", fits, m.Key, last)
			}
		case "items":
			for i, item := range v.Items {
				bad = append(bad, violations(rule, item, fmt.Sprintf("%s[%d]", at, i+1))...)
			}
		case "required":
			for _, key := range rule.Items {
				if _, ok := v.Get(key.Str); !ok && v.Kind == value.Mapping {
					add("%s is missing", key.Str)
				}
			}
		case "properties":
			bad = append(bad, propertyViolations(schema, rule, v, at)...)
		default:
			panic("unknown keyword " + m.Key)
		}
	}
	if _, ok := schema.Get("properties"); !ok {
		bad = append(bad, propertyViolations(schema, value.Object(), v, at)...)
	}
	return bad
}

func propertyViolations(schema, properties, v value.Value, at string) []string {
	var bad []string
	others, has := schema.Get("additionalProperties")
	for _, m := range v.Members {
		path := at + "." + m.Key
		if rule, ok := properties.Get(m.Key); ok {
			bad = append(bad, violations(rule, m.Value, path)...)
		} else if has && others.Kind == value.Mapping {
			bad = append(bad, violations(others, m.Value, path)...)
		} else if has && !others.Bool {
			bad = append(bad, path+": unknown")
		}
	}
	return bad
}

func hasType(rule, v value.Value) bool {
	names := rule.Items
	if rule.Kind == value.Text {
		names = []value.Value{rule}
	}
	for _, n := range names {
		switch n.Str {
		case "integer":
			if v.Kind == value.Numeric && v.Num == float64(int64(v.Num)) {
				return true
			}
		case []string{"null", "boolean", "number", "string", "array", "object"}[v.Kind]:
			return true
		}
	}
	return false
}

func parseFile(t *testing.T, name string) value.Value {
	t.Helper()
	files, err := library.Files(name)
	if err != nil {
		t.Fatal(err)
	}
	text, err := fs.ReadFile(files, "study.yaml")
	if err != nil {
		t.Fatal(err)
	}
	tree, problems := studyfile.Parse(text)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return tree
}

func TestLibraryFitsTheSchema(t *testing.T) {
	t.Parallel()
	schema := study.JSONSchema()
	for _, name := range library.Names() {
		if bad := violations(schema, parseFile(t, name), name); len(bad) > 0 {
			t.Errorf("%s", strings.Join(bad, "\n"))
		}
	}
}

// The schema refuses what the reader refuses, as far as a schema can.
func TestSchemaRefuses(t *testing.T) {
	t.Parallel()
	schema := study.JSONSchema()
	files, err := library.Files("motion-coherence")
	if err != nil {
		t.Fatal(err)
	}
	text, err := fs.ReadFile(files, "study.yaml")
	if err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct{ name, cut, put string }{
		{"unknown key", "  minutes: 9", "  minutes: 9\n  colour: red"},
		{"missing key", "  minutes: 9\n", ""},
		{"unknown parameter", "    coherence: 0.5", "    coherance: 0.5"},
		{"parameter of another kind", "    coherence: 0.5", "    facing: left"},
		{"out of range", "    coherence: 0.5", "    coherence: 1.5"},
		{"not a number", "    coherence: 0.5", "    coherence: half"},
		{"not whole", "    max_trials: 70", "    max_trials: 70.5"},
		{"unknown option", "    aperture: annulus", "    aperture: square"},
		{"unknown kind", "    kind: dots", "    kind: dost"},
		{"empty text", "  title: Which way do the dots move?", "  title: ''"},
		{"list for a number", "    set: {coherence: 0.9}", "    set: {coherence: [0.9]}"},
		{"empty balance", "      direction_deg: [0, 180]", "      direction_deg: []"},
		{"texts in the file", "  folder: texts", "  consent: I agree"},
		{"sentence of a number", "    label: {en: Left, de: Links}", "    label: {en: 1, de: Links}"},
	} {
		broken := strings.Replace(string(text), tt.cut, tt.put, 1)
		if broken == string(text) {
			t.Errorf("%s: the study has no %q", tt.name, tt.cut)
			continue
		}
		tree, problems := studyfile.Parse([]byte(broken))
		if problems.Failed() {
			t.Errorf("%s: %v", tt.name, problems)
			continue
		}
		if bad := violations(schema, tree, "study"); len(bad) == 0 {
			t.Errorf("%s: fits the schema", tt.name)
		}
	}
}

// The reference has every key of every kind of display, and each says what it means.
func TestReferenceIsComplete(t *testing.T) {
	t.Parallel()
	text := study.Reference()
	for _, kind := range display.Kinds() {
		_, section, ok := strings.Cut(text, "\n## displays.* with kind: "+kind.Name+"\n")
		if !ok {
			t.Errorf("kind %s is not described", kind.Name)
			continue
		}
		section, _, _ = strings.Cut(section, "\n## ")
		for i := range kind.Params {
			if !strings.Contains(section, "`"+kind.Params[i].Key+"`") {
				t.Errorf("kind %s: parameter %s is not described", kind.Name, kind.Params[i].Key)
			}
		}
	}
	rows := 0
	for line := range strings.Lines(text) {
		if !strings.HasPrefix(line, "| ") || strings.HasPrefix(line, "| ---") {
			continue
		}
		rows++
		cells := strings.Split(strings.ReplaceAll(strings.TrimSpace(line), "\\|", "/"), "|")
		if len(cells) != 7 || strings.TrimSpace(cells[5]) == "" {
			t.Errorf("a key without a meaning, or a torn row: %s", line)
		}
	}
	if rows < 300 {
		t.Errorf("only %d rows", rows)
	}
	for _, want := range []string{
		"| `speed_deg_per_s` | deg/s | 0 to 200 | 5 | speed of signal dots and of moving noise dots |",
		"| *`stimulus_ms`* | ms | 1 to 600000 |  | duration of the stimulus |",
		"| `aperture` |  | circle, annulus, rectangle | circle | shape of the field |",
		"| `fullscreen` |  | true, false | true | ask for full screen |",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("the reference has no line %s", want)
		}
	}
}
