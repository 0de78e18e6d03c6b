package psychometric

import (
	"fmt"
	"math"
)

// Shape is the standard function F(u) that rises from 0 to 1, u = β (z − α).
type Shape int

// The shapes. Weibull takes z = log10 x whatever the scale, because it is a function
// of x/a; the others take z on the model's scale. On the log10 scale Gumbel and
// Weibull are the same function.
const (
	// Weibull is F = 1 − exp(−10^u), that is 1 − exp(−(x/a)^β) with a = 10^α.
	Weibull Shape = iota
	// Gumbel is F = 1 − exp(−10^u).
	Gumbel
	// Logistic is F = 1/(1 + e^(−u)).
	Logistic
	// Gaussian is F = Φ(u), so that 1/β is its standard deviation.
	Gaussian
	// Sech is the hyperbolic secant's integral, F = (2/π) atan(e^(πu/2)).
	Sech
)

var shapeNames = []string{"weibull", "gumbel", "logistic", "gaussian", "sech"}

// String is the name used in commands and files.
func (s Shape) String() string {
	if s < 0 || int(s) >= len(shapeNames) {
		return fmt.Sprintf("shape %d", int(s))
	}
	return shapeNames[s]
}

// ParseShape is the inverse of String.
func ParseShape(name string) (Shape, error) {
	for i, n := range shapeNames {
		if n == name {
			return Shape(i), nil
		}
	}
	return 0, fmt.Errorf("unknown shape %q: one of weibull, gumbel, logistic, gaussian, sech", name)
}

// At is F(u).
func (s Shape) At(u float64) float64 {
	v := s.at(u)
	return v.f
}

// Quantile is the u with F(u) = f; −Inf for f ≤ 0 and +Inf for f ≥ 1.
func (s Shape) Quantile(f float64) float64 {
	if f <= 0 {
		return math.Inf(-1)
	}
	if f >= 1 {
		return math.Inf(1)
	}
	switch s {
	case Weibull, Gumbel:
		return math.Log10(-math.Log1p(-f))
	case Logistic:
		return math.Log(f) - math.Log1p(-f)
	case Gaussian:
		return -math.Sqrt2 * math.Erfcinv(2*f)
	default:
		return 2 / math.Pi * math.Log(math.Tan(math.Pi/2*f))
	}
}

// width is the distance in u over which F rises from 0.1 to 0.9.
func (s Shape) width() float64 { return s.Quantile(0.9) - s.Quantile(0.1) }

// standard is F and what follows from it at one u: c = 1 − F without loss of digits, d = F′, e = F″.
type standard struct{ f, c, d, e float64 }

func (s Shape) at(u float64) standard {
	switch s {
	case Weibull, Gumbel:
		return gumbelAt(u)
	case Logistic:
		t := math.Exp(-math.Abs(u))
		small, large := t/(1+t), 1/(1+t)
		d := small * large
		if u < 0 {
			return standard{small, large, d, d * (large - small)}
		}
		return standard{large, small, d, d * (small - large)}
	case Gaussian:
		small := 0.5 * math.Erfc(math.Abs(u)/math.Sqrt2)
		d := math.Exp(-0.5*u*u) / math.Sqrt(2*math.Pi)
		e := 0.0
		if d > 0 {
			e = -u * d
		}
		if u < 0 {
			return standard{small, 1 - small, d, e}
		}
		return standard{1 - small, small, d, e}
	default:
		return sechAt(u)
	}
}

func gumbelAt(u float64) standard {
	h := math.Exp(u * math.Ln10)
	if h > 700 {
		return standard{f: 1}
	}
	c := math.Exp(-h)
	f := 1 - c
	if h < 0.1 {
		f = -math.Expm1(-h)
	}
	d := math.Ln10 * h * c
	return standard{f, c, d, math.Ln10 * d * (1 - h)}
}

func sechAt(u float64) standard {
	x := math.Pi / 2 * math.Abs(u)
	t := math.Exp(-x)
	small := 2 / math.Pi * math.Atan(t)
	d := t / (1 + t*t)
	e := math.Pi / 2 * d * (1 - t*t) / (1 + t*t)
	if u < 0 {
		return standard{small, 1 - small, d, e}
	}
	return standard{1 - small, small, d, -e}
}
