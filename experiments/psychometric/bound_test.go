package psychometric

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"

	"pgregory.net/rapid"
)

// TestBestPlacement checks testdata/psychometric_fisher_bound.csv: minima of P(1−P)/P′²
// found by bounded search and by the root of the derivative at 30 digits.
func TestBestPlacement(t *testing.T) {
	t.Parallel()
	file, err := os.Open("../../testdata/psychometric_fisher_bound.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	number := func(s string) float64 {
		x, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatal(err)
		}
		return x
	}
	for _, row := range rows[1:] {
		m := Model{Scale: Linear, Guess: number(row[1])}
		switch row[0] {
		case "logistic":
			m.Shape = Logistic
		case "gauss":
			m.Shape = Gaussian
		default:
			m.Shape = Gumbel
		}
		lapse := 0.0
		if row[3] != "" { // P = δ g + (1 − δ)(1 − (1 − g) …): upper asymptote 1 − δ (1 − g)
			lapse = number(row[3]) * (1 - m.Guess)
		} else {
			lapse = number(row[2])
		}
		const slope = 2
		b := BestPlacement(m, 1, slope, lapse)
		k := number(row[6])
		if math.Abs(b.Variance*slope*slope-k) > 1e-6*k || math.Abs(100*b.Proportion-number(row[4])) > 1e-4 || math.Abs((b.Level-1)*slope-number(row[5])) > 1e-5 {
			t.Errorf("%v: got %+v", row, b)
		}
	}
}

// TestBoundOfTrials: n trials at the best level reach n times the information, unknown
// slope or lapse rate never tells more, and the bound is the expected standard error of a fit.
func TestBoundOfTrials(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		m := drawModel(t)
		m.Lapse = FreeLapse()
		threshold, slope, lapse := rapid.Float64Range(0.8, 1.6).Draw(t, "threshold"), rapid.Float64Range(1, 3).Draw(t, "slope"), 0.02
		best := BestPlacement(m, threshold, slope, lapse)
		v, ok := Bound(m, Data{{best.Level, 40, 0}}, threshold, slope, lapse, Known{true, true})
		// With P as the criterion the threshold depends on the lapse rate but not if it is known.
		if !ok || math.Abs(v*40/best.Variance-1) > 1e-9 {
			t.Fatalf("bound %g for best %+v", v, best)
		}
		d := Data{{0, 20, 0}, {0.6, 40, 0}, {1.1, 40, 0}, {1.9, 40, 0}, {4, 40, 0}}
		known, _ := Bound(m, d, threshold, slope, lapse, Known{true, true})
		partly, _ := Bound(m, d, threshold, slope, lapse, Known{Lapse: true})
		unknown, ok := Bound(m, d, threshold, slope, lapse, Known{})
		if !ok || known > partly*(1+1e-9) || partly > unknown*(1+1e-9) || known < best.Variance/180*(1-1e-9) {
			t.Fatalf("known %g, slope unknown %g, both unknown %g, best %g", known, partly, unknown, best.Variance/180)
		}
	})
	d := Data{{2, 40, 21}, {4, 40, 23}, {8, 40, 29}, {16, 40, 36}, {32, 40, 39}, {64, 40, 39}}
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	r, err := Fit(d, m)
	if err != nil {
		t.Fatal(err)
	}
	v, ok := Bound(m, d, r.Threshold.Value, r.Slope.Value, 0.02, Known{Lapse: true})
	if !ok || math.Abs(math.Sqrt(v)-r.OnScale.SE) > 1e-9 {
		t.Errorf("bound %g, standard error %g", math.Sqrt(v), r.OnScale.SE)
	}
	if _, ok := Bound(m, Data{{0, 10, 0}}, 1, 3, 0.02, Known{Lapse: true}); ok {
		t.Error("trials at level 0 determine no threshold")
	}
	if e := Efficiency(0.5, 1); e != 0.5 {
		t.Errorf("efficiency %g", e)
	}
}
