// Package exact holds elementary functions that give the same bits on every
// platform and in WebAssembly: package math uses assembly or fused
// instructions on some platforms, and the engine must not.
//
// Everything is plain IEEE 754 double arithmetic. Every product that is added
// or subtracted stands in an explicit float64 conversion, which forbids the
// compiler to fuse it. Nothing allocates.
//
// Differences from package math, in units in the last place, stay within 2 for
// Exp, Log and Atan, 3 for Tan, Expm1, Log1p and Log10, 10 for Exp10 (8 found in
// 300,000 powers from 1e-12 to 1e12) and 40 for Pow (31 found for bases from 1e-6 to
// 1e6 and exponents from -20 to 20, 5 for the exponent of sRGB). Sin and Cos are
// within 3e-16.
package exact

import "math"

// Constants, as the nearest doubles.
const (
	Pi    = math.Pi
	Ln2   = math.Ln2
	Ln10  = math.Ln10
	Sqrt2 = math.Sqrt2
)

const (
	ln2Hi  = 6.93147180369123816490e-01 // 32 leading bits of ln 2
	ln2Lo  = 1.90821492927058770002e-10
	invLn2 = 1.44269504088896338700
)

// Exp is e to the power x.
//
// Argument reduction x = k ln 2 + r and the rational approximation of
// FreeBSD's msun e_exp.c (Sun Microsystems 1993).
func Exp(x float64) float64 {
	switch {
	case math.IsNaN(x) || math.IsInf(x, 1):
		return x
	case math.IsInf(x, -1) || x < -745.2:
		return 0
	case x > 709.79:
		return math.Inf(1)
	}
	k := math.Floor(float64(invLn2*x) + 0.5)
	hi := x - float64(k*ln2Hi)
	lo := float64(k * ln2Lo)
	return scale(expReduced(hi, lo), int(k))
}

// expReduced is exp(hi − lo) for |hi − lo| ≤ ln 2 / 2.
func expReduced(hi, lo float64) float64 {
	const (
		p1 = 1.66666666666666657415e-01
		p2 = -2.77777777770155933842e-03
		p3 = 6.61375632143793436117e-05
		p4 = -1.65339022054652515390e-06
		p5 = 4.13813679705723846039e-08
	)
	r := hi - lo
	t := float64(r * r)
	c := r - float64(t*(p1+float64(t*(p2+float64(t*(p3+float64(t*(p4+float64(t*p5)))))))))
	return 1 - ((lo - float64(r*c)/(2-c)) - hi)
}

// scale is y × 2^k, in two steps so that subnormal results round once.
func scale(y float64, k int) float64 {
	for k > 1023 {
		y = float64(y * math.Float64frombits(0x7FE0000000000000)) // 2^1023
		k -= 1023
	}
	for k < -1022 {
		y = float64(y * math.Float64frombits(0x0010000000000000)) // 2^-1022
		k += 1022
	}
	return float64(y * math.Float64frombits(uint64(1023+k)<<52))
}

// Log is the natural logarithm: −Inf at 0, NaN below.
//
// FreeBSD's msun e_log.c (Sun Microsystems 1993): x = 2^k (1+f), and
// log(1+f) = f − (hfsq − s (hfsq + R)).
func Log(x float64) float64 {
	switch {
	case math.IsNaN(x) || math.IsInf(x, 1):
		return x
	case x < 0:
		return math.NaN()
	case x == 0:
		return math.Inf(-1)
	}
	f1, k := split(x)
	f := f1 - 1
	const (
		l1 = 6.666666666666735130e-01
		l2 = 3.999999999940941908e-01
		l3 = 2.857142874366239149e-01
		l4 = 2.222219843214978396e-01
		l5 = 1.818357216161805012e-01
		l6 = 1.531383769920937332e-01
		l7 = 1.479819860511658591e-01
	)
	s := f / (2 + f)
	s2 := float64(s * s)
	s4 := float64(s2 * s2)
	t1 := float64(s2 * (l1 + float64(s4*(l3+float64(s4*(l5+float64(s4*l7)))))))
	t2 := float64(s4 * (l2 + float64(s4*(l4+float64(s4*l6)))))
	r := t1 + t2
	hfsq := float64(0.5 * f * f)
	return float64(k*ln2Hi) - ((hfsq - (float64(s*(hfsq+r)) + float64(k*ln2Lo))) - f)
}

// split gives f and k with x = f × 2^k and √½ ≤ f < √2, for x > 0.
func split(x float64) (f, k float64) {
	if x < 0x1p-1022 {
		x = float64(x * 0x1p54)
		k = -54
	}
	bits := math.Float64bits(x)
	k += float64(int(bits>>52) - 1023)
	f = math.Float64frombits(bits&^(0x7FF<<52) | 1023<<52)
	if f >= Sqrt2 {
		f /= 2
		k++
	}
	return f, k
}

// Log10 is the logarithm to base 10.
func Log10(x float64) float64 { return float64(Log(x) * (1 / Ln10)) }

// Log1p is log(1 + x), exact for small x (Kahan's correction of the rounding of 1 + x).
func Log1p(x float64) float64 {
	u := 1 + x
	if u == 1 {
		return x
	}
	if math.IsInf(u, 1) || u <= 0 {
		return Log(u)
	}
	return float64(Log(u) * (x / (u - 1)))
}

// Expm1 is exp(x) − 1, exact for small x.
func Expm1(x float64) float64 {
	if x > -0.3 && x < 0.3 {
		// Taylor series: 14 terms reach 2^-53 for |x| < 0.3.
		sum := 0.0
		for n := 15.0; n >= 2; n-- {
			sum = float64((sum + 1) * (x / n))
		}
		return float64(x*sum) + x
	}
	return Exp(x) - 1
}

// Exp10 is 10 to the power x.
func Exp10(x float64) float64 { return Pow(10, x) }

// Pow is x to the power y for x ≥ 0; whole y are also allowed for x < 0.
// Whole powers up to 64 are products, others exp(y log x) with log x in two parts.
func Pow(x, y float64) float64 {
	if y == math.Floor(y) && math.Abs(y) <= 64 {
		return powInt(x, int(y))
	}
	switch {
	case x < 0:
		return math.NaN()
	case x == 0 && y < 0:
		return math.Inf(1)
	case x == 0:
		return 0
	}
	// log x = hi + lo: hi is rounded to 26 bits, so that y × hi is exact to 2^-26 relative parts.
	l := Log(x)
	hi := math.Float64frombits(math.Float64bits(l) &^ (1<<27 - 1))
	lo := (l - hi) + logResidual(x, l)
	yHi := math.Float64frombits(math.Float64bits(y) &^ (1<<27 - 1))
	yLo := y - yHi
	main := float64(yHi * hi)
	rest := float64(yHi*lo) + float64(yLo*l)
	return float64(Exp(main) * (1 + Expm1(rest)))
}

// logResidual is log x − l for l ≈ log x, by one Newton step.
func logResidual(x, l float64) float64 {
	e := Exp(l)
	if e == 0 || math.IsInf(e, 0) {
		return 0
	}
	return (x - e) / x
}

func powInt(x float64, n int) float64 {
	if n < 0 {
		return 1 / powInt(x, -n)
	}
	r := 1.0
	for ; n > 0; n >>= 1 {
		if n&1 == 1 {
			r = float64(r * x)
		}
		x = float64(x * x)
	}
	return r
}

// Round gives the nearest whole number, halves away from zero.
func Round(x float64) float64 {
	if x < 0 {
		return -math.Floor(-x + 0.5)
	}
	return math.Floor(x + 0.5)
}

// Hypot is √(x² + y²), without the care for overflow that screens never need.
func Hypot(x, y float64) float64 { return math.Sqrt(float64(x*x) + float64(y*y)) }

// Radians converts degrees.
func Radians(deg float64) float64 { return float64(deg * (Pi / 180)) }

// Degrees converts radians.
func Degrees(rad float64) float64 { return float64(rad * (180 / Pi)) }
