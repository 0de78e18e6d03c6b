package studyfile_test

import (
	"bytes"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"testing/fstest"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/txtar"

	"distal/experiments/studyfile"
)

const studyName = "study.yaml"

// baseFiles are testdata/base.yaml and short texts in both of its languages.
func baseFiles(t testing.TB) fstest.MapFS {
	t.Helper()
	text, err := os.ReadFile("testdata/base.yaml")
	if err != nil {
		t.Fatal(err)
	}
	files := fstest.MapFS{studyName: {Data: text}}
	for _, language := range []string{"en", "de"} {
		for _, kind := range []string{"information", "consent", "instructions", "debrief"} {
			files["texts/"+kind+"."+language+".md"] = &fstest.MapFile{Data: []byte("# " + kind + "\n\n- I agree.\n")}
		}
	}
	return files
}

func TestBaseHasNoProblem(t *testing.T) {
	t.Parallel()
	s, problems := studyfile.Read(baseFiles(t), studyName)
	if len(problems) > 0 {
		t.Fatalf("problems:\n%v", problems)
	}
	if len(s.Blocks) != 2 || len(s.Groups) != 2 || len(s.Questions) != 2 {
		t.Errorf("%d blocks, %d groups, %d questions", len(s.Blocks), len(s.Groups), len(s.Questions))
	}
}

// Each case of testdata/broken changes the base study in one or more places
// ("cut" becomes "put") and holds the exact text that a researcher is shown.
// UPDATE=1 writes the texts anew, to be reviewed.
func TestMessages(t *testing.T) {
	t.Parallel()
	names, err := filepath.Glob("testdata/broken/*.txtar")
	if err != nil || len(names) < 60 {
		t.Fatalf("%d cases, %v", len(names), err)
	}
	for _, name := range names {
		t.Run(strings.TrimSuffix(filepath.Base(name), ".txtar"), func(t *testing.T) {
			t.Parallel()
			archive, err := txtar.ParseFile(name)
			if err != nil {
				t.Fatal(err)
			}
			files := baseFiles(t)
			want := edit(t, files, archive)
			_, problems := studyfile.Read(files, studyName)
			var got bytes.Buffer
			if err := studyfile.Print(&got, files, problems); err != nil {
				t.Fatal(err)
			}
			if len(problems) == 0 {
				t.Fatal("the broken study was read without a problem")
			}
			if os.Getenv("UPDATE") != "" {
				want.Data = got.Bytes()
				if err := os.WriteFile(name, txtar.Format(archive), 0o644); err != nil {
					t.Fatal(err)
				}
				return
			}
			if diff := cmp.Diff(string(want.Data), got.String()); diff != "" {
				t.Errorf("message (-want +got):\n%s", diff)
			}
		})
	}
}

// edit applies the changes of a case and gives its expected message.
func edit(t *testing.T, files fstest.MapFS, archive *txtar.Archive) (want *txtar.File) {
	t.Helper()
	text := string(files[studyName].Data)
	for i := range archive.Files {
		switch f := &archive.Files[i]; f.Name {
		case "cut":
			cut, put := string(f.Data), string(archive.Files[i+1].Data)
			// Cuts need not be whole lines: the line end that the archive adds does not count.
			if cut = strings.TrimSuffix(cut, "\n"); strings.Count(text, cut) == 0 {
				t.Fatalf("the base study has no %q", cut)
			}
			text = strings.Replace(text, cut, strings.TrimSuffix(put, "\n"), 1)
		case "put":
		case "want":
			want = f
		default:
			files[f.Name] = &fstest.MapFile{Data: f.Data}
		}
	}
	if want == nil {
		t.Fatal("the case has no section want")
	}
	files[studyName] = &fstest.MapFile{Data: []byte(text)}
	return want
}
