package detection

import (
	"encoding/csv"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"

	"pgregory.net/rapid"
)

func readTable(t *testing.T, name string) [][3]float64 {
	t.Helper()
	file, err := os.Open("../../../testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var list [][3]float64
	for _, row := range rows[1:] {
		var numbers [3]float64
		for i, s := range row {
			if numbers[i], err = strconv.ParseFloat(s, 64); err != nil {
				t.Fatal(err)
			}
		}
		list = append(list, numbers)
	}
	return list
}

// TestForcedChoiceTables: testdata/psychometric_dprime_mafc.csv (7 digits) and
// psychometric_pc_mafc.csv (8 digits), by quadrature checked with a second integral.
func TestForcedChoiceTables(t *testing.T) {
	t.Parallel()
	const tolerance = 1e-6
	for _, row := range readTable(t, "psychometric_dprime_mafc.csv") {
		d, err := DPrime(row[1], int(row[0]))
		if err != nil || math.Abs(d-row[2]) > tolerance {
			t.Errorf("m %g, pc %g: %.8f (%v), table %.8f", row[0], row[1], d, err, row[2])
		}
	}
	for _, row := range readTable(t, "psychometric_pc_mafc.csv") {
		if pc := ProportionCorrect(row[1], int(row[0])); math.Abs(pc-row[2]) > 1e-8 {
			t.Errorf("m %g, d′ %g: %.10f, table %.10f", row[0], row[1], pc, row[2])
		}
	}
}

// TestForcedChoiceIdentities: m = 2 has the closed form Φ(d′/√2), d′ = 0 is chance, and
// DPrime is the inverse of ProportionCorrect.
func TestForcedChoiceIdentities(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		m, d := rapid.IntRange(2, 8).Draw(t, "m"), rapid.Float64Range(-3, 4).Draw(t, "d")
		pc := ProportionCorrect(d, m)
		if back, err := DPrime(pc, m); err != nil || math.Abs(back-d) > 1e-6 {
			t.Fatalf("%g becomes %g (%v)", d, back, err)
		}
		if math.Abs(ProportionCorrect(d, 2)-cdf(d/math.Sqrt2)) > 1e-10 {
			t.Fatalf("two alternatives: %.12f, closed form %.12f", ProportionCorrect(d, 2), cdf(d/math.Sqrt2))
		}
		if math.Abs(ProportionCorrect(0, m)-1/float64(m)) > 1e-10 {
			t.Fatalf("chance is %g", ProportionCorrect(0, m))
		}
	})
	for _, pc := range []float64{0, 1, -1, math.NaN()} {
		if _, err := DPrime(pc, 4); err == nil {
			t.Errorf("proportion %g passes", pc)
		}
	}
}

// TestYesNoExamples: testdata/psychometric_yesno.json, by two routes to the normal quantile.
func TestYesNoExamples(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../../testdata/psychometric_yesno.json")
	if err != nil {
		t.Fatal(err)
	}
	type rates struct {
		HitRate float64 `json:"hit_rate"`
		FARate  float64 `json:"fa_rate"`
		DPrime  float64 `json:"dprime"`
		C       float64 `json:"c"`
		LnBeta  float64 `json:"ln_beta"`
	}
	var examples []struct {
		Hits         int    `json:"hits"`
		FalseAlarms  int    `json:"false_alarms"`
		SignalTrials int    `json:"signal_trials"`
		NoiseTrials  int    `json:"noise_trials"`
		Plain        *rates `json:"plain"`
		LogLinear    rates  `json:"loglinear"`
	}
	if err := json.Unmarshal(text, &examples); err != nil {
		t.Fatal(err)
	}
	for _, e := range examples {
		c := Counts{e.Hits, e.SignalTrials, e.FalseAlarms, e.NoiseTrials}
		s, err := YesNo(c, 0)
		if err != nil {
			t.Fatal(err)
		}
		for _, pair := range [][2]float64{
			{s.HitRate, e.LogLinear.HitRate}, {s.FalseAlarmRate, e.LogLinear.FARate},
			{s.DPrime.Value, e.LogLinear.DPrime}, {s.Criterion.Value, e.LogLinear.C}, {s.LnBeta, e.LogLinear.LnBeta},
		} {
			if math.Abs(pair[0]-pair[1]) > 1e-6 {
				t.Errorf("%+v: got %.8f, want %.8f", c, pair[0], pair[1])
			}
		}
		if s.Corrected != (e.Plain == nil) {
			t.Errorf("%+v: extreme %v", c, s.Corrected)
		}
		if e.Plain == nil {
			continue
		}
		h, f := c.Rates()
		if d := quantile(h) - quantile(f); math.Abs(d-e.Plain.DPrime) > 1e-6 || !s.DPrime.Interval.Contains(d) {
			t.Errorf("%+v: plain d′ %.8f, want %.8f; interval %+v", c, d, e.Plain.DPrime, s.DPrime.Interval)
		}
	}
}

// TestExtremes: perfect performance has a lower limit only, and nothing is NaN.
func TestExtremes(t *testing.T) {
	t.Parallel()
	perfect := Counts{20, 20, 0, 20}
	s, err := YesNo(perfect, 0)
	if err != nil || !s.DPrime.Interval.OpenHigh || s.DPrime.Interval.Low < 1.5 {
		t.Errorf("%+v, %v", s, err)
	}
	always, err := YesNo(Counts{25, 25, 25, 25}, 0)
	if err != nil || !always.DPrime.Interval.OpenLow || !always.DPrime.Interval.OpenHigh || !always.Criterion.Interval.OpenLow {
		t.Errorf("%+v, %v", always, err)
	}
	d, err := SameDifferent(perfect, Differencing, 0)
	if err != nil || !d.DPrime.Interval.OpenHigh || d.DPrime.Interval.Low < 2 {
		t.Errorf("%+v, %v", d, err)
	}
	chance, err := SameDifferent(Counts{5, 20, 9, 20}, Differencing, 0)
	if err != nil || chance.DPrime.Value != 0 || chance.DPrime.Interval.Low != 0 || chance.DPrime.Interval.OpenHigh {
		t.Errorf("%+v, %v", chance, err)
	}
	all, err := ForcedChoice(40, 40, 8, 0)
	if err != nil || !all.Interval.OpenHigh || all.Interval.OpenLow || all.Interval.Low < 2 {
		t.Errorf("%+v, %v", all, err)
	}
	for _, c := range []Counts{{1, 0, 1, 2}, {3, 2, 0, 1}, {0, 1, -1, 1}} {
		if _, err := YesNo(c, 0); err == nil {
			t.Errorf("%+v passes", c)
		}
	}
	if _, err := YesNo(perfect, 1.5); err == nil {
		t.Error("a confidence of 1.5 passes")
	}
	if _, err := ForcedChoice(5, 4, 2, 0); err == nil {
		t.Error("5 correct of 4 pass")
	}
}

// TestSameDifferentInverse: rates made from d′ and a criterion give them back in large samples.
func TestSameDifferentInverse(t *testing.T) {
	t.Parallel()
	const n = 4_000_000
	for _, d := range []float64{0.8, 1.5, 3} {
		h, f := differenceRates(d, 1.7)
		c := Counts{int(h * n), n, int(f * n), n}
		s, err := SameDifferent(c, Differencing, 0)
		if err != nil || math.Abs(s.DPrime.Value-d) > 1e-4 || math.Abs(s.Criterion.Value-1.7) > 1e-4 {
			t.Errorf("differencing %g: %+v, %v", d, s, err)
		}
		// The independent rule, unbiased: "different" when the observations fall on opposite sides of the middle.
		q := cdf(d / 2)
		p := q*q + (1-q)*(1-q)
		c = Counts{int(p * n), n, int((1 - p) * n), n}
		if s, err = SameDifferent(c, Independent, 0); err != nil || math.Abs(s.DPrime.Value-d) > 1e-4 {
			t.Errorf("independent %g: %+v, %v", d, s, err)
		}
	}
	// Macmillan and Creelman (2005): for the same rates the differencing rule needs the larger d′.
	c := Counts{80, 100, 30, 100}
	a, _ := SameDifferent(c, Differencing, 0)
	b, _ := SameDifferent(c, Independent, 0)
	if a.DPrime.Value <= b.DPrime.Value {
		t.Errorf("differencing %g, independent %g", a.DPrime.Value, b.DPrime.Value)
	}
}

// TestTwoInterval: with no bias d′ is √2 z(pc).
func TestTwoInterval(t *testing.T) {
	t.Parallel()
	s, err := TwoInterval(Counts{3800, 5000, 1200, 5000}, 0)
	if err != nil {
		t.Fatal(err)
	}
	want, _ := DPrime(0.76, 2)
	if math.Abs(s.DPrime.Value-want) > 2e-3 || math.Abs(s.Criterion.Value) > 1e-9 {
		t.Errorf("%+v, want %g", s, want)
	}
}

// TestIntervalsCover: nominal 95% intervals cover d′ in 93 to 98% of 1,000 simulated data
// sets (the counts being few, coverage is not exactly nominal).
func TestIntervalsCover(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(3, 1))
	draw := func(n int, p float64) int {
		k := 0
		for range n {
			if rng.Float64() < p {
				k++
			}
		}
		return k
	}
	const runs, n, d, k = 400, 50, 1.4, 0.3
	yesNo, difference, forced := 0, 0, 0
	for i := range runs {
		c := Counts{draw(n, cdf(d/2-k)), n, draw(n, cdf(-d/2-k)), n}
		s, err := YesNo(c, 0)
		if err != nil {
			t.Fatal(err)
		}
		if s.DPrime.Interval.Contains(d) {
			yesNo++
		}
		e, err := ForcedChoice(draw(n, ProportionCorrect(d, 4)), n, 4, 0)
		if err != nil {
			t.Fatal(err)
		}
		if e.Interval.Contains(d) {
			forced++
		}
		if i%10 > 0 {
			continue
		}
		h, f := differenceRates(2, 1.5)
		if s, err = SameDifferent(Counts{draw(n, h), n, draw(n, f), n}, Differencing, 0); err != nil {
			t.Fatal(err)
		}
		if s.DPrime.Interval.Contains(2) {
			difference++
		}
	}
	if yesNo < 368 || yesNo > 392 || forced < 368 || difference < 34 {
		t.Errorf("covered: yes/no %d, forced choice %d of 400, same/different %d of 40", yesNo, forced, difference)
	}
}
