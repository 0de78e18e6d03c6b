// Package planning computes how many trials and participants a question needs.
package planning

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/integrate/quad"
	"gonum.org/v1/gonum/stat/distuv"
)

// Power is the probability that Student's two-sided test at level alpha finds a
// difference of d standard deviations between two independent groups of n each.
func Power(n int, d, alpha float64) float64 {
	if n < 2 {
		return 0
	}
	df := float64(2*n - 2)
	limit := distuv.StudentsT{Sigma: 1, Nu: df}.Quantile(1 - alpha/2)
	shift := math.Abs(d) * math.Sqrt(float64(n)/2)
	return 1 - noncentralT(limit, df, shift) + noncentralT(-limit, df, shift)
}

// noncentralT is the distribution function of the noncentral t distribution:
// the mean, over s with s² chi-squared of df degrees of freedom divided by df, of the
// normal distribution function of t s − shift (Johnson NL, Kotz S, Balakrishnan N
// 1995, Continuous Univariate Distributions 2, chapter 31).
func noncentralT(t, df, shift float64) float64 {
	chi := distuv.ChiSquared{K: df}
	density := func(s float64) float64 { return 2 * df * s * chi.Prob(df*s*s) }
	low, high := math.Sqrt(chi.Quantile(1e-14)/df), math.Sqrt(chi.Quantile(1-1e-14)/df)
	return quad.Fixed(func(s float64) float64 {
		return density(s) * distuv.UnitNormal.CDF(t*s-shift)
	}, low, high, 200, quad.Legendre{}, 0)
}

// MostParticipants is the largest group that Participants considers.
const MostParticipants = 100_000

// ErrTooMany says that even MostParticipants in a group are too few.
var ErrTooMany = errors.New("the difference is too small for any group of a size that can be studied")

// Participants is the least number in each of two groups for which Power is reached.
func Participants(d, alpha, power float64) (int, error) {
	if !(math.Abs(d) > 0) || Power(MostParticipants, d, alpha) < power {
		return 0, ErrTooMany
	}
	low, high := 1, 2 // low is too few
	for Power(high, d, alpha) < power {
		low, high = high, 2*high
	}
	for high-low > 1 {
		if middle := (low + high) / 2; Power(middle, d, alpha) < power {
			low = middle
		} else {
			high = middle
		}
	}
	return high, nil
}
