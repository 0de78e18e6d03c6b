package enginebuild

import (
	"bytes"
	"os"
	"strings"
	"testing"

	"github.com/andybalholm/brotli"
)

func TestEmptyDocs(t *testing.T) {
	t.Parallel()
	const source = "package p\n\nvar k = Kind{\n\tName: \"a\", Doc: \"one \" +\n\t\t\"two\",\n\tParams: []Param{{Key: \"x\", Doc: `three`, Min: 1}, {Key: \"Doc: y\"}},\n}\n"
	const want = "package p\n\nvar k = Kind{\n\tName: \"a\", Doc: \"\",\n\tParams: []Param{{Key: \"x\", Doc: \"\", Min: 1}, {Key: \"Doc: y\"}},\n}\n"
	got, err := emptyDocs("p.go", []byte(source))
	if err != nil {
		t.Fatal(err)
	}
	if string(got) != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	const walk = "package p\n\nfunc walk(c *codec) {\n\tc.group(\"about\", true, \"what\", func(c *codec) { c.text(\"name\", &n, word{Default: \"kept\"}, \"why\") })\n" +
		"\tnamed(c, \"choices\", &l, \"how\", func() {})\n\tc.problem(key, v, \"a message\")\n\tc.number(key, &x, rule, doc)\n}\n"
	wantWalk := strings.NewReplacer(`"what"`, `""`, `"why"`, `""`, `"how"`, `""`).Replace(walk)
	if got, err := emptyDocs("p.go", []byte(walk)); err != nil || string(got) != wantWalk {
		t.Errorf("%v, got\n%s\nwant\n%s", err, got, wantWalk)
	}
	if _, err := emptyDocs("p.go", []byte("package")); err == nil {
		t.Error("a broken source was accepted")
	}
}

// The engine is small enough to be fetched while people read, the same source
// gives the same bytes, and the explanations of parameters are not in it.
func TestBuild(t *testing.T) {
	t.Parallel()
	var builds [2][]byte
	for i := range builds {
		path, err := Build(t.Context(), t.TempDir())
		if err != nil {
			t.Fatal(err)
		}
		if builds[i], err = os.ReadFile(path); err != nil {
			t.Fatal(err)
		}
	}
	if !bytes.Equal(builds[0], builds[1]) {
		t.Error("two builds differ")
	}
	for _, text := range []string{"counter-clockwise from rightwards", "fixation mark alone before the stimulus", "what participants do in a trial"} {
		if bytes.Contains(builds[0], []byte(text)) {
			t.Errorf("the engine holds the explanation %q", text)
		}
	}
	var compressed bytes.Buffer
	w := brotli.NewWriterLevel(&compressed, brotli.BestCompression)
	if _, err := w.Write(builds[0]); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	// 600 KiB may be fetched in all; scripts and styles take less than 26 KiB.
	const limit = (600 - 26) << 10
	t.Logf("%d bytes, %d with brotli", len(builds[0]), compressed.Len())
	if compressed.Len() > limit {
		t.Errorf("the engine has %d bytes with brotli, at most %d are allowed for", compressed.Len(), limit)
	}
}
