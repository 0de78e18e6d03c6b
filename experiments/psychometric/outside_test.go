package psychometric

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os/exec"
	"strings"
	"syscall"
	"testing"
)

// python is Debian's interpreter, for which SciPy is packaged.
const python = "/usr/bin/python3"

// tolerances against other programs' optimisers.
const (
	sameParameter  = 1e-4 // in threshold on the scale and ln β, both of order 1, and lapse rate
	sameLikelihood = 1e-6
)

// outsideSet is a data set as the scripts in testdata take it.
type outsideSet struct {
	model    Model
	data     Data
	Shape    string     `json:"shape"`
	Z        []float64  `json:"z"`
	N        []float64  `json:"n"`
	K        []float64  `json:"k"`
	Guess    float64    `json:"guess"`
	Lapse    float64    `json:"lapse"`
	Free     bool       `json:"free"`
	LapseMax float64    `json:"lapse_max"`
	Start    [2]float64 `json:"start"`
}

// outsideSets are simulated data with a maximum, for every shape, guess rate and lapse rule.
func outsideSets(shapes []Shape, lapses []LapseRule) []outsideSet {
	rng := rand.New(rand.NewPCG(20, 26))
	var list []outsideSet
	for _, shape := range shapes {
		for _, guess := range []float64{0, 0.125, 0.5} {
			for _, lapse := range lapses {
				m := Model{Shape: shape, Scale: Linear, Guess: guess, Lapse: lapse}
				levels := []float64{-1.2, -0.7, -0.3, 0, 0.3, 0.7, 1.2, 1.8}
				d := simulated(rng, levels, 40+rng.IntN(60), m, 0.2, shape.width()/1.5, 0.02)
				s := outsideSet{model: m, data: d, Shape: shape.String(), Guess: guess, Lapse: lapse.Value,
					Free: lapse.Free, LapseMax: DefaultLapseMax, Start: [2]float64{0.1, math.Log(shape.width())}}
				for _, l := range d {
					s.Z, s.N, s.K = append(s.Z, l.X), append(s.N, float64(l.N)), append(s.K, float64(l.K))
				}
				list = append(list, s)
			}
		}
	}
	return list
}

func runOutside(tb testing.TB, input []byte, name string, args ...string) []byte {
	tb.Helper()
	if _, err := exec.LookPath(name); err != nil {
		tb.Skipf("%s is not installed (Debian packages r-base-core and python3-scipy)", name)
	}
	cmd := exec.Command(name, args...)
	cmd.Stdin = bytes.NewReader(input)
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	out, err := cmd.Output()
	if err != nil {
		tb.Fatalf("%s: %v: %s", name, err, stderr.String())
	}
	return out
}

func TestFitAgreesWithGLM(t *testing.T) {
	t.Parallel()
	sets := outsideSets([]Shape{Gumbel, Logistic, Gaussian}, []LapseRule{FixedLapse(0), FixedLapse(0.02)})
	var input strings.Builder
	for i, s := range sets {
		for _, l := range s.data {
			fmt.Fprintln(&input, i, s.Shape, s.Guess, s.Lapse, l.X, l.N, l.K)
		}
	}
	lines := strings.Split(strings.TrimSpace(string(runOutside(t, []byte(input.String()), "Rscript", "testdata/fit.R"))), "\n")
	if len(lines) != len(sets) {
		t.Fatalf("%d fits for %d sets", len(lines), len(sets))
	}
	for i, line := range lines {
		var set int
		var intercept, slope, value float64
		if _, err := fmt.Sscan(line, &set, &intercept, &slope, &value); err != nil || set != i {
			t.Fatalf("line %q: %v", line, err)
		}
		threshold := -intercept / slope
		if sets[i].model.Shape == Gumbel {
			slope /= math.Ln10 // cloglog is in powers of e
		}
		agree(t, sets[i], []float64{threshold, math.Log(slope)}, value)
	}
}

func TestFitAgreesWithSciPy(t *testing.T) {
	t.Parallel()
	sets := outsideSets([]Shape{Gumbel, Logistic, Gaussian, Sech}, []LapseRule{FixedLapse(0.01), FreeLapse()})
	input, err := json.Marshal(sets)
	if err != nil {
		t.Fatal(err)
	}
	var fits []struct {
		Theta         []float64 `json:"theta"`
		LogLikelihood float64   `json:"log_likelihood"`
	}
	if err := json.Unmarshal(runOutside(t, input, python, "testdata/fit.py"), &fits); err != nil {
		t.Fatal(err)
	}
	if len(fits) != len(sets) {
		t.Fatalf("%d fits for %d sets", len(fits), len(sets))
	}
	for i, f := range fits {
		agree(t, sets[i], f.Theta, f.LogLikelihood)
	}
}

// agree compares our fit with another's: the likelihood must not be lower, and where it
// is the same the parameters must be too.
func agree(t *testing.T, s outsideSet, theta []float64, value float64) {
	t.Helper()
	r, err := Maximise(s.data, s.model)
	if err != nil {
		t.Fatal(err)
	}
	name := fmt.Sprintf("%s guess %g lapse %g free %v", s.Shape, s.Guess, s.Lapse, s.Free)
	if r.LogLikelihood < value-sameLikelihood {
		t.Errorf("%s: log-likelihood %.9f, the other has %.9f", name, r.LogLikelihood, value)
		return
	}
	if r.LogLikelihood > value+sameLikelihood {
		t.Logf("%s: log-likelihood higher by %.2g", name, r.LogLikelihood-value)
		return
	}
	ours := []float64{r.OnScale.Value, math.Log(r.Slope.Value), r.Lapse.Value}
	for i := range theta {
		if math.Abs(ours[i]-theta[i]) > sameParameter {
			t.Errorf("%s: parameters %v, the other has %v", name, ours, theta)
			return
		}
	}
}

// BenchmarkAgainstSciPy reports how many times longer SciPy's fastest suitable optimiser
// takes for one fit of the same data, from good starting values, than Maximise, which
// finds its own and adds standard errors, limits and a verdict. Both are in processor
// time, the best of several rounds, so that other work on the machine counts for neither.
func BenchmarkAgainstSciPy(b *testing.B) {
	for _, lapse := range []LapseRule{FixedLapse(0.02), FreeLapse()} {
		for _, shape := range []Shape{Gumbel, Logistic, Gaussian} {
			s := outsideSets([]Shape{shape}, []LapseRule{lapse})[2]
			b.Run(fmt.Sprintf("%v/free=%v", shape, lapse.Free), func(b *testing.B) {
				input, err := json.Marshal([]outsideSet{s})
				if err != nil {
					b.Fatal(err)
				}
				var times []struct{ Seconds float64 }
				if err := json.Unmarshal(runOutside(b, input, python, "testdata/fit.py", "time"), &times); err != nil {
					b.Fatal(err)
				}
				const round = 500
				own := math.Inf(1)
				for b.Loop() {
					before := processorSeconds(b)
					for range round {
						if _, err := Maximise(s.data, s.model); err != nil {
							b.Fatal(err)
						}
					}
					own = math.Min(own, (processorSeconds(b)-before)/round)
				}
				b.ReportMetric(own*1e6, "µs/fit")
				b.ReportMetric(times[0].Seconds*1e6, "scipy-µs")
				b.ReportMetric(times[0].Seconds/own, "times-faster")
			})
		}
	}
}

// processorSeconds is the processor time this process has used.
func processorSeconds(tb testing.TB) float64 {
	tb.Helper()
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		tb.Fatal(err)
	}
	return float64(u.Utime.Nano()+u.Stime.Nano()) / 1e9
}
