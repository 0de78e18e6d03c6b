package fitting

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"errors"
	"image/png"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/alecthomas/kong"
)

// counts are the invented data set A of testdata/psychometric_fits.json, a second
// observer, and one without an error.
const counts = `coherence_percent,n,k,who
2,40,21,anna
4,40,23,anna
8,40,29,anna
16,40,36,anna
32,40,39,anna
64,40,39,anna
2,40,22,ben
4,40,27,ben
8,40,35,ben
16,40,39,ben
32,40,40,ben
64,40,39,ben
2,20,20,cleo
4,20,20,cleo
`

func options() Options {
	return Options{Columns: Columns{Level: "coherence_percent", Correct: "k", N: "n", By: "who"}, Shape: "weibull", Scale: "log10", Guess: 0.5, Lapse: "0.02"}
}

func run(t *testing.T, o Options) *Report {
	t.Helper()
	r, err := Run(strings.NewReader(counts), o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// golden compares with a file of testdata, which UPDATE=1 rewrites.
func golden(t *testing.T, name string, got []byte) {
	t.Helper()
	path := filepath.Join("testdata", name)
	if os.Getenv("UPDATE") == "1" {
		if err := os.WriteFile(path, got, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(got, want) {
		t.Errorf("%s differs; got\n%s", path, got)
	}
}

func TestTable(t *testing.T) {
	t.Parallel()
	o := options()
	o.Bootstrap, o.Seed, o.Posterior, o.Compare, o.Group = 400, 1, true, true, true
	var out bytes.Buffer
	if err := run(t, o).WriteTable(&out); err != nil {
		t.Fatal(err)
	}
	golden(t, "table.txt", out.Bytes())
}

// TestJSON reads the JSON back: the numbers are those published for the data set
// (testdata/psychometric_fits.json, A, Weibull), open sides are null.
func TestJSON(t *testing.T) {
	t.Parallel()
	o := options()
	o.Compare, o.Group, o.Posterior, o.Bootstrap = true, true, true, 100
	var out bytes.Buffer
	if err := run(t, o).WriteJSON(&out); err != nil {
		t.Fatal(err)
	}
	var report struct {
		Fits []struct {
			Group  string
			Result struct {
				Status    string
				Threshold struct {
					Valid    bool
					Value    float64
					SE       float64
					Interval struct {
						Low, High *float64
						OpenLow   bool `json:"open_low"`
					}
				}
				Slope         struct{ Value, SE float64 }
				LogLikelihood float64 `json:"log_likelihood"`
				Deviance      float64
			}
			Bootstrap *struct{}
			Posterior *struct{}
			Note      string
		}
		Comparison *struct{ Tests []struct{ Parameter string } }
		Group      *struct {
			Hierarchy *struct{ Runs []struct{ Shrinkage float64 } }
		}
	}
	if err := json.Unmarshal(out.Bytes(), &report); err != nil {
		t.Fatal(err)
	}
	anna := report.Fits[0].Result
	for _, c := range [][3]float64{
		{anna.Threshold.Value, 11.05633306, 1e-6}, {anna.Threshold.SE, 1.776263509, 1e-6}, {anna.Slope.Value, 1.597539776, 1e-6},
		{anna.Slope.SE, 0.5418036917, 1e-6}, {anna.LogLikelihood, -100.8849959, 1e-6}, {anna.Deviance, 0.104654526, 1e-6},
	} {
		if math.Abs(c[0]-c[1]) > c[2]*math.Max(1, c[1]) {
			t.Errorf("got %.9f, published %.9f", c[0], c[1])
		}
	}
	cleo := report.Fits[2]
	if cleo.Result.Status != "all_correct" || cleo.Result.Threshold.Valid || cleo.Result.Threshold.Interval.High == nil || !cleo.Result.Threshold.Interval.OpenLow || cleo.Bootstrap != nil || cleo.Posterior == nil || cleo.Note == "" {
		t.Errorf("%+v", cleo)
	}
	if len(report.Comparison.Tests) != 3 || len(report.Group.Hierarchy.Runs) != 3 {
		t.Errorf("%+v %+v", report.Comparison, report.Group)
	}
}

// TestFigure draws every format, for one group and several, with trials at level 0 too.
func TestFigure(t *testing.T) {
	t.Parallel()
	several := run(t, options())
	o := options()
	o.By = ""
	zero := strings.Replace(counts, "2,40,21,anna", "0,40,21,anna\n2,40,21,anna", 1)
	one, err := Run(strings.NewReader(zero), o)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range []*Report{several, one} {
		var svg, pdf, picture bytes.Buffer
		for format, w := range map[string]io.Writer{"svg": &svg, "pdf": &pdf, "png": &picture} {
			if err := r.WriteFigure(w, format, ""); err != nil {
				t.Fatal(err)
			}
		}
		if words := svgText(t, svg.Bytes()); !strings.Contains(words, "coherence (%)") || !strings.Contains(words, "proportion correct") || !strings.Contains(words, "guessing") {
			t.Errorf("the figure says %q", words)
		}
		if !bytes.HasPrefix(pdf.Bytes(), []byte("%PDF-")) {
			t.Errorf("PDF begins %q", pdf.Bytes()[:8])
		}
		p, err := png.Decode(&picture)
		if err != nil {
			t.Fatal(err)
		}
		// 86 mm or 3 × 58 mm at 300 dots per inch.
		want := 86.0
		if r == several {
			want = 3 * 58
		}
		if wide := p.Bounds().Dx(); math.Abs(float64(wide)-want/25.4*300) > 2 {
			t.Errorf("%d pixels wide", wide)
		}
	}
	var svg bytes.Buffer
	if err := several.WriteFigure(&svg, "svg", "motion coherence (%)"); err != nil {
		t.Fatal(err)
	}
	words := svgText(t, svg.Bytes())
	for _, says := range []string{"motion coherence (%)", "anna", "11.1 (7.95–15.6)", "all correct: threshold below"} {
		if !strings.Contains(words, says) {
			t.Errorf("%q is not in the figure, which says %q", says, words)
		}
	}
}

// svgText is all text of a well-formed SVG.
func svgText(t *testing.T, svg []byte) string {
	t.Helper()
	d := xml.NewDecoder(bytes.NewReader(svg))
	var words strings.Builder
	for {
		token, err := d.Token()
		if errors.Is(err, io.EOF) {
			return words.String()
		}
		if err != nil {
			t.Fatal(err)
		}
		if text, ok := token.(xml.CharData); ok {
			words.Write(text)
		}
	}
}

// TestFigureOfAnything draws verdicts of every kind.
func TestFigureOfAnything(t *testing.T) {
	t.Parallel()
	for _, text := range []string{
		"x,c\n0,1\n0,0\n", "x,c\n1,1\n", "x,c\n1,0\n2,1\n3,0\n4,1\n", "x,c\n1,0\n1,0\n2,1\n2,1\n", "x,c\n1e-300,0\n1e300,1\n1,1\n2,0\n", "x,c\n1,0\n2,0\n3,0\n",
	} {
		for _, scale := range []string{"log10", "linear"} {
			r, err := Run(strings.NewReader(text), Options{Columns: Columns{Level: "x", Correct: "c"}, Shape: "logistic", Scale: scale, Lapse: "0"})
			if err != nil {
				t.Fatal(err)
			}
			var svg bytes.Buffer
			if err := r.WriteFigure(&svg, "svg", ""); err != nil {
				t.Fatal(err)
			}
			if strings.Contains(svg.String(), "NaN") || svgText(t, svg.Bytes()) == "" {
				t.Errorf("%q on a %s scale: %s", text, scale, svg.String())
			}
		}
	}
}

func TestRunErrors(t *testing.T) {
	t.Parallel()
	for says, change := range map[string]func(*Options){
		"unknown shape":     func(o *Options) { o.Shape = "spline" },
		"unknown scale":     func(o *Options) { o.Scale = "dB" },
		"neither free":      func(o *Options) { o.Lapse = "some" },
		"guess rate":        func(o *Options) { o.Guess = 2 },
		"criterion P = 0.4": func(o *Options) { o.At = 0.4 },
		"no column":         func(o *Options) { o.Level = "speed" },
		"--by":              func(o *Options) { o.By, o.Compare = "", true },
		"at least 40":       func(o *Options) { o.Bootstrap = 3 },
	} {
		o := options()
		change(&o)
		if _, err := Run(strings.NewReader(counts), o); err == nil || !strings.Contains(err.Error(), says) {
			t.Errorf("%s: got %v", says, err)
		}
	}
	for _, name := range []string{"figure.jpg", "figure"} {
		if _, err := FigureFormat(name); err == nil || !strings.Contains(err.Error(), ".svg") {
			t.Errorf("%s: got %v", name, err)
		}
	}
}

func TestLabel(t *testing.T) {
	t.Parallel()
	for column, want := range map[string]string{
		"speed_deg_per_s": "speed (deg/s)", "coherence": "coherence", "dot_lifetime_ms": "dot lifetime (ms)", "_s": " s", "size_deg": "size (deg)",
	} {
		if got := Label(column); got != want {
			t.Errorf("%s becomes %q, want %q", column, got, want)
		}
	}
}

// TestCommand runs the command as kong fills it.
func TestCommand(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	data, figure := filepath.Join(dir, "data.csv"), filepath.Join(dir, "fit.svg")
	if err := os.WriteFile(data, []byte(counts), 0o644); err != nil {
		t.Fatal(err)
	}
	parse := func(args ...string) (*Command, error) {
		var cli struct {
			Fit Command `cmd:""`
		}
		parser, err := kong.New(&cli, kong.Exit(func(int) {}), kong.Writers(io.Discard, io.Discard))
		if err != nil {
			t.Fatal(err)
		}
		_, err = parser.Parse(append([]string{"fit", data}, args...))
		return &cli.Fit, err
	}
	c, err := parse("--level", "coherence_percent", "--correct", "k", "--n", "n", "--lapse", "free", "--json", "-o", figure)
	if err != nil {
		t.Fatal(err)
	}
	var out bytes.Buffer
	if err := c.run(strings.NewReader(counts), &out); err != nil {
		t.Fatal(err)
	}
	if !json.Valid(out.Bytes()) || !strings.Contains(out.String(), `"lapse": "free from 0 to 0.1"`) {
		t.Errorf("%s", out.String())
	}
	if svg, err := os.ReadFile(figure); err != nil || svgText(t, svg) == "" {
		t.Errorf("%v", err)
	}
	if c, err = parse("--level", "coherence_percent", "--correct", "k"); err != nil {
		t.Fatal(err)
	}
	if err := c.run(strings.NewReader(counts), io.Discard); err == nil || !strings.Contains(err.Error(), "line 2, column 6: k:") || !strings.Contains(err.Error(), "--n") {
		t.Errorf("got %v", err)
	}
	if _, err := parse("--correct", "k"); err == nil {
		t.Error("a command without --level passes")
	}
	if help := c.Help(); !strings.Contains(help, "log L = sum of K ln P(x) + (N - K) ln(1 - P(x))") {
		t.Error("the help does not write the likelihood out")
	}
}
