package pointing

import (
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// TestBessel: SciPy 1.10.1, log(i0e(k)) + k and i1e(k)/i0e(k).
func TestBessel(t *testing.T) {
	t.Parallel()
	for _, row := range [][3]float64{
		{1e-3, 2.499999844061702e-07, 0.0004999999375000103},
		{0.5, 0.06154971918548119, 0.24249961258080202},
		{2, 0.8239935414829562, 0.6977746579640082},
		{10, 7.942972083118695, 0.9485998259548459},
		{49, 46.137728940745916, 0.989742758844708},
		{51, 48.11762416649008, 0.9901470475589479},
		{300, 296.22958759300224, 0.9983319397905336},
		{5000, 4994.822489873588, 0.9998999949989995},
	} {
		if got := logI0(row[0]); math.Abs(got-row[1]) > 1e-12*math.Max(1, row[1]) {
			t.Errorf("ln I₀(%g) = %.16g, SciPy %.16g", row[0], got, row[1])
		}
		if got := resultant(row[0]); math.Abs(got-row[2]) > 1e-12 {
			t.Errorf("A(%g) = %.16g, SciPy %.16g", row[0], got, row[2])
		}
		if k := concentration(row[2]); math.Abs(k-row[0]) > 1e-6*row[0] {
			t.Errorf("κ for A(%g) is %g", row[0], k)
		}
	}
}

// radians drawn from a von Mises distribution of mean 0.2 and κ = 8. SciPy 1.10.1:
// vonmises.fit(x, fscale=1), circmean(x) and circstd(x).
var radians = []float64{0.2478, -0.251, 0.5279, 0.2638, 0.4818, -0.3587, 0.3785, 0.6553, 0.1831, 0.2508, 0.0809, 0.3263, 0.48, -0.0503, 0.8638, 0.0372, -0.2972, -0.2301, 0.1699, 0.3107, 0.1287, 0.8876, 0.8822, 0.4297, 0.799, 0.0864, 0.5296, 0.4501, 0.0821, -0.0394}

func TestSummaryAgreesWithSciPy(t *testing.T) {
	t.Parallel()
	var degrees []float64
	for i, x := range radians {
		degrees = append(degrees, x/degree+360*float64(i%3-1)) // whole turns change nothing
	}
	s, err := Summarise(degrees)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(s.Mean*degree-0.27644516707302363) > 1e-9 || math.Abs(s.Deviation*degree-0.34102443297849) > 1e-9 || s.Rayleigh > 1e-6 {
		t.Errorf("%+v", s)
	}
	kappa := concentration(s.Resultant)
	if math.Abs(kappa-9.12612917) > 1e-4 {
		t.Errorf("κ = %g, SciPy has 9.126129", kappa)
	}
	m, err := FitMixture(degrees, Options{NoOpposite: true})
	if err != nil {
		t.Fatal(err)
	}
	// These data need no guesses, so the mixture is the single distribution.
	if m.Guess.Value > 1e-6 || math.Abs(m.Kappa-kappa) > 0.01 || m.GuessP < 0.4 || !m.Guess.Interval.Contains(0) || m.Guess.Interval.High > 0.2 {
		t.Errorf("%+v", m)
	}
	if !m.Bias.Interval.Contains(0.2/degree) || !m.Deviation.Interval.Contains(Deviation(8)) || !m.Bias.Interval.Closed() {
		t.Errorf("bias %+v, sd %+v", m.Bias, m.Deviation)
	}
}

// simulate draws errors of a mixture in degrees.
func simulate(rng *rand.Rand, n int, bias, kappa, opposite, guess float64) []float64 {
	list := make([]float64, n)
	for i := range list {
		u := rng.Float64()
		if u < guess {
			list[i] = 360 * rng.Float64()
			continue
		}
		for { // rejection from the uniform distribution
			x := math.Pi * (2*rng.Float64() - 1)
			if rng.Float64() < math.Exp(kappa*(math.Cos(x)-1)) {
				list[i] = x/degree + bias
				break
			}
		}
		if u < guess+opposite {
			list[i] += 180
		}
	}
	return list
}

// TestMixtureRecovers: with 2,000 responses the estimates lie near the truth and the
// intervals, four standard errors wide, hold it.
func TestMixtureRecovers(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(6, 7))
	m, err := FitMixture(simulate(rng, 2000, 5, 15, 0.12, 0.2), Options{Confidence: 0.999})
	if err != nil {
		t.Fatal(err)
	}
	if !m.Bias.Interval.Contains(5) || !m.Deviation.Interval.Contains(Deviation(15)) || !m.Opposite.Interval.Contains(0.12) || !m.Guess.Interval.Contains(0.2) {
		t.Errorf("%+v", m)
	}
	if m.OppositeP > 1e-6 || m.GuessP > 1e-6 || m.Guess.Interval.High-m.Guess.Interval.Low > 0.12 {
		t.Errorf("%+v", m)
	}
}

// TestMixtureCoverage: nominal 95% intervals of the guesses' share cover it in most of 60
// runs of 200 responses (a true coverage of 93% gives fewer than 51 once in 100).
func TestMixtureCoverage(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(8, 7))
	guess, sd := 0, 0
	for range 24 {
		m, err := FitMixture(simulate(rng, 200, 0, 20, 0.1, 0.2), Options{})
		if err != nil {
			t.Fatal(err)
		}
		if m.Guess.Interval.Contains(0.2) {
			guess++
		}
		if m.Deviation.Interval.Contains(Deviation(20)) {
			sd++
		}
	}
	if guess < 20 || sd < 20 {
		t.Errorf("covered: guesses %d, sd %d of 24", guess, sd)
	}
}

func TestMixtureVerdicts(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(9, 7))
	precise := 0
	for range 100 {
		uniform, err := FitMixture(simulate(rng, 100, 0, 1, 0, 1), Options{})
		if err != nil {
			t.Fatal(err)
		}
		if uniform.Deviation.Valid {
			precise++
		}
	}
	if precise > 10 { // 5% or fewer should be: more than 10 of 100 has a probability of 1%
		t.Errorf("%d of 100 sets of guesses are called precise", precise)
	}
	few, err := FitMixture([]float64{1, 2, 3}, Options{})
	if err != nil || few.Deviation.Valid || !strings.Contains(few.Explanation, "too few") {
		t.Errorf("%+v, %v", few, err)
	}
	same := make([]float64, 40)
	exact, err := FitMixture(same, Options{NoBias: true})
	if err != nil || !exact.Deviation.Valid || exact.Guess.Value > 1e-3 || !strings.Contains(exact.Explanation, "limit") {
		t.Errorf("%+v, %v", exact, err)
	}
	if _, err := FitMixture(nil, Options{}); !errors.Is(err, ErrNoDirections) {
		t.Errorf("got %v", err)
	}
	if _, err := Summarise([]float64{math.NaN()}); !errors.Is(err, ErrNotFinite) {
		t.Errorf("got %v", err)
	}
	if s, err := Summarise([]float64{0, 180}); err != nil || s.MeanValid {
		t.Errorf("%+v, %v", s, err)
	}
}

func TestWrap(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		a := rapid.Float64Range(-1e4, 1e4).Draw(t, "a")
		w := Wrap(a)
		if !(w > -180 && w <= 180) || math.Abs(math.Mod(a-w, 360)) > 1e-9 && math.Abs(math.Abs(math.Mod(a-w, 360))-360) > 1e-9 {
			t.Fatalf("%g becomes %g", a, w)
		}
	})
}
