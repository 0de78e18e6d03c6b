package psychometric

import (
	"fmt"
	"math"
)

// Scale is the axis on which the function is laid out.
type Scale int

// The scales: z = log10 x for levels that are ratios (coherence, speed, contrast,
// duration), z = x for levels that may be negative or zero.
const (
	Log10 Scale = iota
	Linear
)

// String is the name used in commands and files.
func (s Scale) String() string {
	if s == Linear {
		return "linear"
	}
	return "log10"
}

// ParseScale is the inverse of String.
func ParseScale(name string) (Scale, error) {
	switch name {
	case "log10":
		return Log10, nil
	case "linear":
		return Linear, nil
	}
	return 0, fmt.Errorf("unknown scale %q: log10 or linear", name)
}

// DefaultLapseMax is the upper bound of a free lapse rate unless LapseRule.Max says
// otherwise. A bound of this kind keeps a shallow function from being explained by
// lapses; 0.05 to 0.1 is common practice, no source.
const DefaultLapseMax = 0.1

// LapseRule says what is done about the lapse rate. The zero value fixes it at 0.
type LapseRule struct {
	Free  bool    // estimated, between 0 and Max, with no penalty inside these bounds
	Value float64 // the rate when it is fixed
	Max   float64 // upper bound when it is free; 0 means DefaultLapseMax
}

// FixedLapse fixes the lapse rate.
func FixedLapse(rate float64) LapseRule { return LapseRule{Value: rate} }

// FreeLapse estimates the lapse rate within 0 and DefaultLapseMax.
func FreeLapse() LapseRule { return LapseRule{Free: true} }

func (r LapseRule) bounds() (low, high float64) {
	switch {
	case !r.Free:
		return r.Value, r.Value
	case r.Max == 0:
		return 0, DefaultLapseMax
	}
	return 0, r.Max
}

// Criterion says at which point of the function the threshold is read. The zero value
// is the function's own location: F = 1 − 1/e for Weibull and Gumbel, F = ½ for the others.
type Criterion struct {
	kind  criterionKind
	value float64
}

type criterionKind int

const (
	ownLocation criterionKind = iota
	shareOfRise
	proportion
)

// AtShare reads the threshold where F, the share of the rise between the two
// asymptotes, is f (0 < f < 1).
func AtShare(f float64) Criterion { return Criterion{shareOfRise, f} }

// AtProportion reads the threshold where the proportion correct P, lapses included,
// is p (g < p < 1 − l).
func AtProportion(p float64) Criterion { return Criterion{proportion, p} }

// String says it in words.
func (c Criterion) String() string {
	switch c.kind {
	case shareOfRise:
		return fmt.Sprintf("F = %g", c.value)
	case proportion:
		return fmt.Sprintf("P = %g", c.value)
	}
	return "the function's own location"
}

// Model is the function to be fitted.
type Model struct {
	Shape Shape
	Scale Scale
	Guess float64 // lower asymptote, 0 ≤ Guess < 1: 1/m for m alternatives
	Lapse LapseRule
	// Symmetric makes the lapse rate the distance of both asymptotes from 0 and 1, as for
	// "which was faster" judgements where a lapse answers either way; Guess must be 0.
	Symmetric bool
	// Falling is for performance that falls as the level rises.
	Falling bool
	// Slope is held at this value if it is not 0: β of the package comment, per unit of z.
	Slope float64
	// Criterion of the threshold.
	Criterion Criterion
	// PlainProfile takes the threshold's interval from the profile of the likelihood as it
	// is. Otherwise, slopes so steep that F rises from 0.1 to 0.9 within less than the tested
	// range are given less weight, L − ½ ln²(range/spread), because plain intervals are too
	// short in small samples. Estimates, standard errors and other intervals are not affected.
	PlainProfile bool
	// Confidence of the intervals; 0 means 0.95.
	Confidence float64
}

// Check says what makes the model impossible, nil if nothing does.
func (m Model) Check() error {
	low, high := m.Lapse.bounds()
	switch {
	case m.Shape < Weibull || m.Shape > Sech:
		return fmt.Errorf("unknown shape %d", int(m.Shape))
	case m.Scale != Log10 && m.Scale != Linear:
		return fmt.Errorf("unknown scale %d", int(m.Scale))
	case !(m.Guess >= 0 && m.Guess < 1):
		return fmt.Errorf("guess rate %g is not in 0 to 1", m.Guess)
	case m.Symmetric && m.Guess != 0:
		return fmt.Errorf("a symmetric lapse rate sets both asymptotes: guess must be 0, not %g", m.Guess)
	case !(low >= 0 && high < 1) || math.IsNaN(high):
		return fmt.Errorf("lapse rate %g is not in 0 to 1", high)
	case m.top(high)-m.bottom(high) <= 0.01:
		return fmt.Errorf("guess rate %g and lapse rate %g leave no room for the function to rise", m.Guess, high)
	case !(m.Slope >= 0) || math.IsInf(m.Slope, 0):
		return fmt.Errorf("slope %g: a fixed slope is above 0, and 0 leaves it free", m.Slope)
	case !(m.Confidence >= 0 && m.Confidence < 1):
		return fmt.Errorf("confidence %g is not in 0 to 1", m.Confidence)
	}
	return m.checkCriterion(m.Criterion)
}

func (m Model) checkCriterion(c Criterion) error {
	_, high := m.Lapse.bounds()
	switch c.kind {
	case shareOfRise:
		if !(c.value > 0 && c.value < 1) {
			return fmt.Errorf("criterion F = %g is not between 0 and 1", c.value)
		}
	case proportion:
		if !(c.value > m.bottom(high) && c.value < m.top(high)) {
			return fmt.Errorf("criterion P = %g is not between the asymptotes %g and %g", c.value, m.bottom(high), m.top(high))
		}
	}
	return nil
}

// Predict is P(x) for a function with the given threshold (in the level's unit, at the
// model's criterion), slope β and lapse rate.
func (m Model) Predict(x, threshold, slope, lapse float64) float64 {
	t, z := m.onScale(threshold), m.onScale(x)
	q := m.offset(m.Criterion, lapse)
	u := slope*m.sign()*(z-t) + q.q
	if math.IsInf(z, 0) {
		u = m.sign() * z
	}
	return m.bottom(lapse) + (m.top(lapse)-m.bottom(lapse))*m.Shape.At(u)
}

// Convert re-expresses a threshold (level's unit) read at one criterion as the
// threshold of the same function read at another.
func (m Model) Convert(threshold, slope, lapse float64, from, to Criterion) float64 {
	shift := (m.offset(to, lapse).q - m.offset(from, lapse).q) / slope
	return m.offScale(m.onScale(threshold) + m.sign()*shift)
}

func (m Model) logarithmic() bool { return m.Scale == Log10 || m.Shape == Weibull }

func (m Model) onScale(x float64) float64 {
	if m.logarithmic() {
		return math.Log10(x)
	}
	return x
}

func (m Model) offScale(z float64) float64 {
	if m.logarithmic() {
		return math.Pow(10, z)
	}
	return z
}

// sign is −1 for a falling function, which is fitted as a rising one of −z.
func (m Model) sign() float64 {
	if m.Falling {
		return -1
	}
	return 1
}

func (m Model) bottom(lapse float64) float64 {
	if m.Symmetric {
		return lapse
	}
	return m.Guess
}

func (m Model) top(lapse float64) float64 { return 1 - lapse }

func (m Model) confidence() float64 {
	if m.Confidence == 0 {
		return 0.95
	}
	return m.Confidence
}

// quantile is u at the criterion with its derivatives by the lapse rate.
type quantile struct{ q, dq, ddq float64 }

// offset is u at the criterion, so that u = β (z − threshold) + offset.
// With P at the criterion held at p, F = (p − bottom)/(top − bottom) moves with the lapse rate.
func (m Model) offset(c Criterion, lapse float64) quantile {
	switch c.kind {
	case ownLocation:
		return quantile{}
	case shareOfRise:
		return quantile{q: m.Shape.Quantile(c.value)}
	}
	rise := m.top(lapse) - m.bottom(lapse)
	f := (c.value - m.bottom(lapse)) / rise
	df, ddf := f/rise, 2*f/(rise*rise)
	if m.Symmetric {
		df = (2*c.value - 1) / (rise * rise)
		ddf = 4 * df / rise
	}
	q := m.Shape.Quantile(f)
	s := m.Shape.at(q)
	dq := df / s.d
	return quantile{q, dq, (ddf - s.e*dq*dq) / s.d}
}
