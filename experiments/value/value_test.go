package value_test

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"distal/experiments/value"
)

// vectors are the published test data of RFC 8785 (sections 3.2.2 and B).
type vectors struct {
	Documents []struct{ Source, Input, Output string }
	Numbers   [][2]string `json:"numbers_ieee754_hex_to_text"`
}

func readVectors(t testing.TB) vectors {
	t.Helper()
	text, err := os.ReadFile("../../testdata/rfc8785.json")
	if err != nil {
		t.Fatal(err)
	}
	var v vectors
	if err := json.Unmarshal(text, &v); err != nil {
		t.Fatal(err)
	}
	return v
}

func TestCanonicalPublishedVectors(t *testing.T) {
	t.Parallel()
	v := readVectors(t)
	if len(v.Documents) < 3 || len(v.Numbers) < 5 {
		t.Fatal("test vectors are missing")
	}
	for _, d := range v.Documents {
		tree, err := value.ParseJSON([]byte(d.Input))
		if err != nil {
			t.Fatalf("%s: %v", d.Source, err)
		}
		got, err := value.Canonical(tree)
		if err != nil || string(got) != d.Output {
			t.Errorf("%s: %s %v, want %s", d.Source, got, err, d.Output)
		}
	}
	for _, n := range v.Numbers {
		bits, err := strconv.ParseUint(n[0], 16, 64)
		if err != nil {
			t.Fatal(err)
		}
		got, err := value.Canonical(value.Number(math.Float64frombits(bits)))
		if err != nil || string(got) != n[1] {
			t.Errorf("%s: %s %v, want %s", n[0], got, err, n[1])
		}
	}
}

// The order of RFC 8785 section 3.2.3: UTF-16 code units, not code points.
func TestMembersAreSortedByUTF16(t *testing.T) {
	t.Parallel()
	tree := value.Object(
		value.Member{Key: "\ufb33", Value: value.Number(1)},
		value.Member{Key: "\U0001f600", Value: value.Number(2)},
		value.Member{Key: "1", Value: value.Number(3)},
	)
	got, err := value.Canonical(tree)
	if want := `{"1":3,"` + "\U0001f600" + `":2,"` + "\ufb33" + `":1}`; err != nil || string(got) != want {
		t.Errorf("got %s %v, want %s", got, err, want)
	}
}

func TestCanonicalRefuses(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		given  value.Value
		expect error
	}{
		{value.Number(math.NaN()), value.ErrNotFinite},
		{value.Number(math.Inf(-1)), value.ErrNotFinite},
		{value.String("\xff"), value.ErrNotUTF8},
		{value.Object(value.Member{Key: "a"}, value.Member{Key: "a"}), value.ErrTwice},
	} {
		if _, err := value.Canonical(tt.given); !errors.Is(err, tt.expect) {
			t.Errorf("error %v, want %v", err, tt.expect)
		}
	}
}

func TestParseJSONSaysWhere(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct{ given, expect string }{
		{"", "line 1, column 1: the text ends"},
		{"{\n  \"a\": 1,\n  \"a\": 2\n}", "line 3, column 3: the key \"a\" stands twice"},
		{"[1,\n 02]", "line 2, column 3: a comma or ] should be here"},
		{"[1 2]", "line 1, column 4: a comma"},
		{"\"a\nb\"", "control character"},
		{`"\ud800"`, "surrogate"},
		{"1e999", "range of doubles"},
		{"nul", "did you mean null?"},
		{"1 1", "something follows"},
		{strings.Repeat("[", 100), "nested deeper"},
		{"\"\xff\"", "UTF-8"},
	} {
		_, err := value.ParseJSON([]byte(tt.given))
		if err == nil || !strings.Contains(err.Error(), tt.expect) {
			t.Errorf("%q: error %v, want %q", tt.given, err, tt.expect)
		}
	}
}

// Whatever we accept, the standard library accepts too and means the same by;
// the canonical form reads back as itself.
func FuzzParseJSON(f *testing.F) {
	for _, d := range readVectors(f).Documents {
		f.Add([]byte(d.Input))
	}
	f.Add([]byte(`{"a":[1e-7,-0,"\u00e9\ud83d\ude00"],"b":null}`))
	f.Fuzz(func(t *testing.T, text []byte) {
		tree, err := value.ParseJSON(text)
		if err != nil {
			return
		}
		if !json.Valid(text) {
			t.Fatalf("accepted %q, which is not JSON", text)
		}
		first, err := value.Canonical(tree)
		if err != nil {
			t.Fatalf("canonical form of %q: %v", text, err)
		}
		again, err := value.ParseJSON(first)
		if err != nil {
			t.Fatalf("canonical form %q does not read: %v", first, err)
		}
		second, err := value.Canonical(again)
		if err != nil || !bytes.Equal(first, second) {
			t.Fatalf("canonical form of %q is not stable: %q", first, second)
		}
	})
}
