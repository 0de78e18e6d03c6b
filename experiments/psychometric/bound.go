package psychometric

import "math"

// Placement is the best level for a trial.
type Placement struct {
	Level      float64 // in its own unit
	Proportion float64 // P there
	// Variance is the least P (1 − P)/P′² over all levels: the variance that an ideal
	// estimate of threshold alone would have after one trial, in squared units of the scale
	// (log10 units on a log10 scale). After n trials it is Variance/n. It is the ideal sweat
	// factor of Taylor MM (1971) J Acoust Soc Am 49:505–508.
	Variance float64
}

// BestPlacement finds where a trial tells most about the threshold, slope and lapse
// rate being known, for an observer with this function.
func BestPlacement(m Model, threshold, slope, lapse float64) Placement {
	q := m.offset(m.Criterion, lapse).q
	variance := func(u float64) float64 { return m.trialVariance(u, lapse) }
	best := -8.0
	for u := -8.0; u <= 8; u += 0.05 {
		if variance(u) < variance(best) {
			best = u
		}
	}
	u := goldenSection(variance, best-0.05, best+0.05)
	z := m.onScale(threshold) + m.sign()*(u-q)/slope
	bottom := m.bottom(lapse)
	return Placement{
		Level:      m.offScale(z),
		Proportion: bottom + (m.top(lapse)-bottom)*m.Shape.At(u),
		Variance:   variance(u) / (slope * slope),
	}
}

// trialVariance is P (1 − P)/P′² per unit of u; +Inf where the function is flat.
func (m Model) trialVariance(u, lapse float64) float64 {
	bottom := m.bottom(lapse)
	rise := m.top(lapse) - bottom
	s := m.Shape.at(u)
	d := rise * s.d
	if d == 0 {
		return math.Inf(1)
	}
	return (bottom + rise*s.f) * (lapse + rise*s.c) / (d * d)
}

// goldenSection minimises a function with one minimum between a and b.
func goldenSection(f func(float64) float64, a, b float64) float64 {
	return goldenSectionTo(f, a, b, 1e-9)
}

func goldenSectionTo(f func(float64) float64, a, b, tolerance float64) float64 {
	ratio := (math.Sqrt(5) - 1) / 2
	c, d := b-ratio*(b-a), a+ratio*(b-a)
	fc, fd := f(c), f(d)
	for b-a > tolerance {
		if fc < fd {
			b, d, fd = d, c, fc
			c = b - ratio*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + ratio*(b-a)
			fd = f(d)
		}
	}
	return (a + b) / 2
}

// Known says which other parameters a bound takes as known.
type Known struct{ Slope, Lapse bool }

// Bound is the Cramér–Rao bound on the variance of an unbiased estimate of the
// threshold, in squared units of the scale, from trials at these levels (Level.K is not
// used) by an observer with this function; ok is false where the trials do not
// determine the threshold at all.
func Bound(m Model, d Data, threshold, slope, lapse float64, known Known) (variance float64, ok bool) {
	var information matrix
	t, q := m.onScale(threshold), m.offset(m.Criterion, lapse)
	bottom := m.bottom(lapse)
	rise := m.top(lapse) - bottom
	dRise, dBottom := -1.0, 0.0
	if m.Symmetric {
		dRise, dBottom = -2, 1
	}
	for _, l := range d {
		v := slope * m.sign() * (m.onScale(l.X) - t)
		s := m.Shape.at(v + q.q)
		if s.d == 0 {
			v = 0 // a level of 0 on a log10 scale, infinitely far from the threshold
		}
		yes, no := bottom+rise*s.f, lapse+rise*s.c
		if yes <= 0 || no <= 0 {
			continue
		}
		// Derivatives by threshold, ln slope and lapse rate.
		by := vector{-rise * s.d * slope * m.sign(), rise * s.d * v, dBottom + dRise*s.f + rise*s.d*q.dq}
		for a := range 3 {
			for b := range 3 {
				information[a][b] += float64(l.N) * by[a] * by[b] / yes / no
			}
		}
	}
	inverse, ok := invert(&information, [3]bool{true, !known.Slope, !known.Lapse})
	return inverse[iThreshold][iThreshold], ok
}

// Efficiency is the bound ÷ the mean squared error reached, both in squared units of the scale.
func Efficiency(bound, meanSquaredError float64) float64 {
	if meanSquaredError <= 0 {
		return 0
	}
	return bound / meanSquaredError
}
