// Package pointing analyses directions pointed to on a dial: circular summaries, and the
// mixture of precise, opposite-direction and guessed responses that judgements of motion
// direction show. Angles are in degrees; an error is the response minus the true direction.
//
// References: Fisher NI (1993) Statistical analysis of circular data; Mardia KV, Jupp PE
// (2000) Directional statistics; for mixtures of precise and guessed responses Zhang W,
// Luck SJ (2008) Nature 453:233–235.
package pointing

import "math"

const degree = math.Pi / 180

// Wrap brings an angle into −180 < a ≤ 180 degrees.
func Wrap(degrees float64) float64 {
	a := math.Mod(degrees, 360)
	if a > 180 {
		return a - 360
	}
	if a <= -180 {
		return a + 360
	}
	return a
}

// logI0 is ln I₀(κ), κ ≥ 0: the power series Σ (κ²/4)^k/(k!)² up to 50, beyond it the
// asymptotic series e^κ/√(2πκ) Σ (1²·3²…(2k−1)²)/(k! (8κ)^k); Abramowitz and Stegun (1964),
// 9.6.10 and 9.7.1. Relative error below 1e-14.
func logI0(kappa float64) float64 {
	if kappa <= 50 {
		term, sum := 1.0, 1.0
		for k := 1.0; term > 1e-17*sum; k++ {
			term *= kappa * kappa / 4 / (k * k)
			sum += term
		}
		return math.Log(sum)
	}
	return kappa - math.Log(2*math.Pi*kappa)/2 + math.Log(asymptotic(kappa, 0))
}

// resultant is A(κ) = I₁(κ)/I₀(κ), the mean resultant length of a von Mises
// distribution: the continued fraction of the ratio (Gauss; Abramowitz and Stegun 9.1.73
// for modified functions) evaluated backwards up to 50, beyond it the ratio of the
// asymptotic series (9.7.1).
func resultant(kappa float64) float64 {
	if kappa > 50 {
		return asymptotic(kappa, 4) / asymptotic(kappa, 0)
	}
	r := 0.0
	for order := int(kappa) + 40; order >= 1; order-- {
		r = kappa / (2*float64(order) + kappa*r)
	}
	return r
}

// asymptotic is Iν(κ) √(2πκ) e^−κ with µ = 4ν²: Σ (−1)^k ∏ (µ − (2j−1)²)/(k! (8κ)^k).
func asymptotic(kappa, mu float64) float64 {
	term, sum := 1.0, 1.0
	for k := 1.0; k <= 12; k++ {
		term *= -(mu - (2*k-1)*(2*k-1)) / (k * 8 * kappa)
		sum += term
	}
	return sum
}

// maxKappa bounds the concentration: a standard deviation of 0.57 degrees.
const maxKappa = 1e4

// concentration is the κ with A(κ) = r, between 0 and maxKappa.
func concentration(r float64) float64 {
	if r <= 0 {
		return 0
	}
	if r >= resultant(maxKappa) {
		return maxKappa
	}
	if r < 1e-6 {
		return 2 * r // A(κ) = κ/2 − κ³/16 + …
	}
	// Newton's method from Best and Fisher's approximation (1981, Commun Stat Simul Comput
	// 10:493–502), with A′ = 1 − A² − A/κ.
	kappa := 2*r + r*r*r + 5*math.Pow(r, 5)/6
	if r >= 0.85 {
		kappa = 1 / (r * (1 - r) * (3 - r))
	} else if r >= 0.53 {
		kappa = -0.4 + 1.39*r + 0.43/(1-r)
	}
	for range 20 {
		a := resultant(kappa)
		step := (r - a) / (1 - a*a - a/kappa)
		kappa = math.Min(math.Max(kappa+step, kappa/2), 2*kappa)
		if math.Abs(step) < 1e-10*kappa {
			break
		}
	}
	return math.Min(kappa, maxKappa)
}

// Deviation is the circular standard deviation √(−2 ln A(κ)) in degrees of a von Mises
// distribution.
func Deviation(kappa float64) float64 {
	r := resultant(kappa)
	if r <= 0 {
		return math.Inf(1)
	}
	return math.Sqrt(-2*math.Log(r)) / degree
}
