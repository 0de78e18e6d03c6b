package psychometric

import (
	"errors"
	"math"
	"slices"
	"testing"

	"distal/experiments/random"

	"gonum.org/v1/gonum/stat/distuv"
)

var setA = Data{{2, 40, 21}, {4, 40, 23}, {8, 40, 29}, {16, 40, 36}, {32, 40, 39}, {64, 40, 39}}

// TestBinomial compares drawn frequencies with the binomial distribution (gonum) by χ²;
// the seeds are fixed, so the bound is passed or not for ever.
func TestBinomial(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		n int
		p float64
	}{{1, 0.5}, {10, 0}, {10, 1}, {40, 0.02}, {40, 0.98}, {25, 0.6}, {1300, 0.3}} {
		const draws = 20000
		s := random.New(9, uint32(c.n), random.PurposeBootstrap)
		counts := make([]float64, c.n+1)
		for range draws {
			counts[binomial(&s, c.n, c.p)]++
		}
		want := distuv.Binomial{N: float64(c.n), P: c.p}
		chi, cells := 0.0, -1.0
		for k, got := range counts {
			if c.p == 0 || c.p == 1 {
				if (k == int(c.p)*c.n) != (got == draws) {
					t.Errorf("p = %g: %g draws of %d", c.p, got, k)
				}
				continue
			}
			if expected := draws * want.Prob(float64(k)); expected > 5 {
				chi += (got - expected) * (got - expected) / expected
				cells++
			}
		}
		if cells > 0 && (distuv.ChiSquared{K: cells}).Survival(chi) < 0.001 {
			t.Errorf("n %d, p %g: χ² %.1f with %g cells", c.n, c.p, chi, cells)
		}
	}
}

func TestBootstrap(t *testing.T) {
	t.Parallel()
	r, err := Fit(setA, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
	if err != nil {
		t.Fatal(err)
	}
	for _, how := range []Resampling{Parametric, Nonparametric} {
		b, err := r.Bootstrap(BootstrapOptions{Seed: 1, Resampling: how})
		if err != nil {
			t.Fatal(err)
		}
		// The delta method and the bootstrap agree to some 15% for 240 trials.
		if ratio := b.SDOnScale / r.OnScale.SE; ratio < 0.85 || ratio > 1.2 {
			t.Errorf("%v: sd %.4f, standard error %.4f", how, b.SDOnScale, r.OnScale.SE)
		}
		for name, i := range map[string]Interval{"percentile": b.Threshold.Percentile, "bca": b.Threshold.BCa} {
			low, high := i.Low/r.Threshold.Interval.Low, i.High/r.Threshold.Interval.High
			if low < 0.85 || low > 1.15 || high < 0.85 || high > 1.15 {
				t.Errorf("%v %s: %+v beside profile %+v", how, name, i, r.Threshold.Interval)
			}
		}
		if (b.Deviance != nil) != (how == Parametric) {
			t.Errorf("%v: deviance %+v", how, b.Deviance)
		}
		again, err := r.Bootstrap(BootstrapOptions{Seed: 1, Resampling: how})
		if err != nil || again.Threshold != b.Threshold {
			t.Errorf("%v: the same seed gives %+v, then %+v", how, b.Threshold, again.Threshold)
		}
	}
}

// TestDevianceTest fits data that the function cannot describe, and data that it can.
func TestDevianceTest(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		name string
		d    Data
		low  bool
	}{
		{"Good", setA, false},
		{"DipInTheMiddle", Data{{2, 40, 21}, {4, 40, 30}, {8, 40, 38}, {16, 40, 24}, {32, 40, 39}, {64, 40, 39}}, true},
	} {
		r, err := Fit(c.d, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
		if err != nil {
			t.Fatal(err)
		}
		b, err := r.Bootstrap(BootstrapOptions{Seed: 4, Samples: 1000})
		if err != nil {
			t.Fatal(err)
		}
		if low := b.Deviance.P < 0.01; low != c.low {
			t.Errorf("%s: %+v", c.name, b.Deviance)
		}
		// With 40 trials a level χ² is a fair approximation.
		if math.Abs(b.Deviance.P-b.Deviance.ChiSquareP) > 0.1 {
			t.Errorf("%s: Monte Carlo %.3f, χ² %.3f", c.name, b.Deviance.P, b.Deviance.ChiSquareP)
		}
	}
}

// TestBootstrapOpens: where many samples have no threshold, the interval opens.
func TestBootstrapOpens(t *testing.T) {
	t.Parallel()
	r, err := Fit(Data{{1, 20, 14}, {2, 20, 15}, {4, 20, 16}}, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
	if err != nil {
		t.Fatal(err)
	}
	b, err := r.Bootstrap(BootstrapOptions{Seed: 2, Samples: 400})
	if err != nil {
		t.Fatal(err)
	}
	if b.Undetermined < 40 || !b.Threshold.Percentile.OpenLow || !b.Threshold.Percentile.OpenHigh {
		t.Errorf("%d undetermined, %+v", b.Undetermined, b.Threshold)
	}
	all, err := Fit(Data{{1, 20, 20}, {2, 20, 20}}, Model{Guess: 0.5})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := all.Bootstrap(BootstrapOptions{}); !errors.Is(err, ErrNoThreshold) {
		t.Errorf("got %v", err)
	}
}

// TestAcceleration compares the weighted jackknife with one that leaves out every trial in turn.
func TestAcceleration(t *testing.T) {
	t.Parallel()
	r, err := Fit(setA, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
	if err != nil {
		t.Fatal(err)
	}
	var all []float64
	for i, l := range r.Data {
		for trial := range l.N {
			d := slices.Clone(r.Data)
			d[i].N--
			if trial < l.K {
				d[i].K--
			}
			without, err := Maximise(d, r.Model)
			if err != nil {
				t.Fatal(err)
			}
			all = append(all, without.OnScale.Value)
		}
	}
	squares, cubes := 0.0, 0.0
	for _, z := range all {
		d := mean(all) - z
		squares += d * d
		cubes += d * d * d
	}
	j := r.jackknife()
	if got, want := j.acceleration(iThreshold), cubes/(6*math.Pow(squares, 1.5)); math.Abs(got-want) > 1e-9 {
		t.Errorf("acceleration %g, want %g", got, want)
	}
}

// TestBCaLimits: with no bias and no acceleration BCa is the percentile interval, and
// a median-biased sample moves it towards the correction (Efron 1987, eq. 2.3).
func TestBCaLimits(t *testing.T) {
	t.Parallel()
	sorted := make([]float64, 1999)
	for i := range sorted {
		sorted[i] = distuv.UnitNormal.Quantile(float64(i+1) / 2000)
	}
	var l BootstrapLimits
	l.set(sorted, 0, 0, 0.95)
	if math.Abs(l.BCa.Low-l.Percentile.Low) > 1e-9 || math.Abs(l.Percentile.High-1.959964) > 1e-5 {
		t.Errorf("%+v", l)
	}
	l.set(sorted, 0.5, 0, 0.95) // z₀ = 0.5: limits Φ⁻¹ at 2·0.5 ∓ 1.96
	if math.Abs(l.BCa.Low-(1-1.959964)) > 0.01 || math.Abs(l.BCa.High-(1+1.959964)) > 0.05 {
		t.Errorf("%+v", l)
	}
}

func TestLevelFits(t *testing.T) {
	t.Parallel()
	d := slices.Clone(setA)
	d[3].K = 24 // far below the others
	r, err := Fit(d, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
	if err != nil {
		t.Fatal(err)
	}
	sum, worst := 0.0, 0
	list := r.LevelFits()
	for i, l := range list {
		sum += l.Residual * l.Residual
		if math.Abs(l.Shift) > math.Abs(list[worst].Shift) {
			worst = i
		}
	}
	if math.Abs(sum-r.Deviance) > 1e-9 {
		t.Errorf("squared residuals sum to %g, deviance %g", sum, r.Deviance)
	}
	if worst != 3 || list[3].Residual > -1 || !list[3].WithoutValid || list[3].Shift > -2 {
		t.Errorf("%+v", list)
	}
	if p, l := r.ResidualTrends(); math.Abs(p) > 1 || math.Abs(l) > 1 {
		t.Errorf("trends %g %g", p, l)
	}
}

func BenchmarkBootstrap2000(b *testing.B) {
	for _, rule := range []LapseRule{FixedLapse(0.02), FreeLapse()} {
		r, err := Maximise(setA, Model{Guess: 0.5, Lapse: rule})
		if err != nil {
			b.Fatal(err)
		}
		name := "FixedLapse"
		if rule.Free {
			name = "FreeLapse"
		}
		b.Run(name, func(b *testing.B) {
			before := processorSeconds(b)
			for b.Loop() {
				if _, err := r.Bootstrap(BootstrapOptions{Samples: 2000}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric((processorSeconds(b)-before)/float64(b.N)*1e3, "ms-processor")
		})
	}
}
