package exact

import "math"

// Parts of π/2 for argument reduction (Cody and Waite), 33 bits each.
const (
	pio2A = 1.57079632673412561417e+00
	pio2B = 6.07710050630396597660e-11
	pio2C = 2.02226624879595063154e-21
)

// SinCos gives sine and cosine of x in radians. |x| up to 10⁶ keeps full
// precision; displays stay far below.
//
// Kernels of FreeBSD's msun k_sin.c and k_cos.c (Sun Microsystems 1993).
func SinCos(x float64) (sin, cos float64) {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return math.NaN(), math.NaN()
	}
	n := math.Floor(float64(x*(2/Pi)) + 0.5)
	r := ((x - float64(n*pio2A)) - float64(n*pio2B)) - float64(n*pio2C)
	s, c := sinKernel(r), cosKernel(r)
	switch int(n) & 3 {
	case 0:
		return s, c
	case 1:
		return c, -s
	case 2:
		return -s, -c
	}
	return -c, s
}

// Sin is the sine of x in radians.
func Sin(x float64) float64 { s, _ := SinCos(x); return s }

// Cos is the cosine of x in radians.
func Cos(x float64) float64 { _, c := SinCos(x); return c }

// Tan is the tangent of x in radians.
func Tan(x float64) float64 { s, c := SinCos(x); return s / c }

func sinKernel(x float64) float64 {
	const (
		s1 = -1.66666666666666324348e-01
		s2 = 8.33333333332248946124e-03
		s3 = -1.98412698298579493134e-04
		s4 = 2.75573137070700676789e-06
		s5 = -2.50507602534068634195e-08
		s6 = 1.58969099521155010221e-10
	)
	z := float64(x * x)
	p := s2 + float64(z*(s3+float64(z*(s4+float64(z*(s5+float64(z*s6)))))))
	return x + float64(z*x*(s1+float64(z*p)))
}

func cosKernel(x float64) float64 {
	const (
		c1 = 4.16666666666666019037e-02
		c2 = -1.38888888888741095749e-03
		c3 = 2.48015872894767294178e-05
		c4 = -2.75573143513906633035e-07
		c5 = 2.08757232129817482790e-09
		c6 = -1.13596475577881948265e-11
	)
	z := float64(x * x)
	p := float64(z * (c1 + float64(z*(c2+float64(z*(c3+float64(z*(c4+float64(z*(c5+float64(z*c6)))))))))))
	hz := float64(0.5 * z)
	w := 1 - hz
	return w + ((1 - w - hz) + float64(z*p))
}

// Atan is the inverse tangent in radians, −π/2 to π/2.
//
// FreeBSD's msun s_atan.c (Sun Microsystems 1993).
func Atan(x float64) float64 {
	if math.IsNaN(x) {
		return x
	}
	if x < 0 {
		return -Atan(-x)
	}
	switch {
	case x > 1e17:
		return Pi/2 + 6.123233995736766e-17
	case x < 0.4375:
		return x - float64(x*atanSeries(x))
	case x < 0.6875:
		return atanFrom(4.63647609000806093515e-01, 2.26987774529616870924e-17, (float64(2*x)-1)/(2+x))
	case x < 1.1875:
		return atanFrom(7.85398163397448278999e-01, 3.06161699786838301793e-17, (x-1)/(x+1))
	case x < 2.4375:
		return atanFrom(9.82793723247329054082e-01, 1.39033110312309984516e-17, (x-1.5)/(1+float64(1.5*x)))
	}
	return atanFrom(1.57079632679489655800e+00, 6.12323399573676603587e-17, -1/x)
}

func atanFrom(hi, lo, x float64) float64 { return hi - ((float64(x*atanSeries(x)) - lo) - x) }

// atanSeries is s1 + s2 with atan x = x − x (s1 + s2).
func atanSeries(x float64) float64 {
	const (
		a0  = 3.33333333333329318027e-01
		a1  = -1.99999999998764832476e-01
		a2  = 1.42857142725034663711e-01
		a3  = -1.11111104054623557880e-01
		a4  = 9.09088713343650656196e-02
		a5  = -7.69187620504482999495e-02
		a6  = 6.66107313738753120669e-02
		a7  = -5.83357013379057348645e-02
		a8  = 4.97687799461593236017e-02
		a9  = -3.65315727442169155270e-02
		a10 = 1.62858201153657823623e-02
	)
	z := float64(x * x)
	w := float64(z * z)
	s1 := float64(z * (a0 + float64(w*(a2+float64(w*(a4+float64(w*(a6+float64(w*(a8+float64(w*a10)))))))))))
	s2 := float64(w * (a1 + float64(w*(a3+float64(w*(a5+float64(w*(a7+float64(w*a9)))))))))
	return s1 + s2
}

// Atan2 is the angle of the point (x, y) from the x axis, −π to π.
func Atan2(y, x float64) float64 {
	switch {
	case x == 0 && y == 0:
		return 0
	case x == 0 && y > 0:
		return Pi / 2
	case x == 0:
		return -Pi / 2
	}
	a := Atan(math.Abs(y / x))
	if x < 0 {
		a = Pi - a
	}
	if y < 0 {
		return -a
	}
	return a
}

// Asin is the inverse sine in radians for −1 ≤ x ≤ 1, NaN elsewhere.
func Asin(x float64) float64 { return Atan2(x, math.Sqrt((1-x)*(1+x))) }

// Acos is the inverse cosine in radians for −1 ≤ x ≤ 1, NaN elsewhere.
func Acos(x float64) float64 { return Atan2(math.Sqrt((1-x)*(1+x)), x) }
