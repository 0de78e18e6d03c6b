package pointing

import (
	"errors"
	"math"
)

// Summary describes directions without a model.
type Summary struct {
	Count int `json:"count"`
	// Mean is the circular mean in degrees, −180 to 180; MeanValid is false where the
	// directions cancel so that there is none.
	Mean      float64 `json:"mean_deg"`
	MeanValid bool    `json:"mean_valid"`
	// Resultant is the mean resultant length, 0 (all directions alike) to 1 (one direction).
	Resultant float64 `json:"resultant"`
	// Deviation is the circular standard deviation √(−2 ln R) in degrees, 0 where R is 0.
	Deviation float64 `json:"sd_deg"`
	// SE is the circular standard error of the mean in degrees (Fisher 1993, eq. 4.21), from
	// the second moment and so for any distribution with one peak; 0 where there is none.
	SE float64 `json:"se_deg"`
	// Rayleigh is the p value of the test that directions are uniform, by Wilkie D (1983,
	// Appl Stat 32:311–312).
	Rayleigh float64 `json:"rayleigh_p"`
}

// ErrNoDirections says that there is nothing to summarise.
var ErrNoDirections = errors.New("no directions")

// ErrNotFinite says that a direction is not a number.
var ErrNotFinite = errors.New("a direction is not a finite number")

// Summarise computes the circular summary of angles in degrees.
func Summarise(degrees []float64) (*Summary, error) {
	if err := check(degrees); err != nil {
		return nil, err
	}
	s := &Summary{Count: len(degrees)}
	n := float64(s.Count)
	var c, d float64
	for _, a := range degrees {
		c += math.Cos(a * degree)
		d += math.Sin(a * degree)
	}
	s.Resultant = math.Min(math.Hypot(c, d)/n, 1)
	s.Rayleigh = rayleigh(n, s.Resultant)
	if s.Resultant < 1e-12 {
		s.Resultant = 0
		return s, nil
	}
	s.MeanValid, s.Mean = true, math.Atan2(d, c)/degree
	s.Deviation = math.Sqrt(-2*math.Log(s.Resultant)) / degree
	second := 0.0
	for _, a := range degrees {
		second += math.Cos(2*(a-s.Mean)*degree) / n
	}
	dispersion := (1 - second) / (2 * s.Resultant * s.Resultant)
	s.SE = math.Asin(math.Min(math.Sqrt(dispersion/n), 1)) / degree
	return s, nil
}

func check(degrees []float64) error {
	if len(degrees) == 0 {
		return ErrNoDirections
	}
	for _, a := range degrees {
		if math.IsNaN(a) || math.IsInf(a, 0) {
			return ErrNotFinite
		}
	}
	return nil
}

func rayleigh(n, r float64) float64 {
	sum := n * r
	return math.Min(math.Exp(math.Sqrt(1+4*n+4*(n*n-sum*sum))-(1+2*n)), 1)
}
