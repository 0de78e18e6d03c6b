// Package reaction analyses response times: the EZ-diffusion model, robust summaries, and
// the detection of fast guesses and lapses. Times are in seconds unless the name says ms.
package reaction

import (
	"errors"
	"fmt"
	"math"
)

// EZ are the parameters of a diffusion between two boundaries that starts halfway, by the
// method of Wagenmakers EJ, van der Maas HLJ, Grasman RPPP (2007) An EZ-diffusion model for
// response time and accuracy. Psychon Bull Rev 14:3–22. The within-trial noise is s = 0.1.
type EZ struct {
	Drift       float64 `json:"drift"`               // v, evidence per second
	Boundary    float64 `json:"boundary"`            // a, distance between the boundaries
	NonDecision float64 `json:"non_decision_s"`      // Ter, seconds
	Decision    float64 `json:"mean_decision_s"`     // mean decision time, seconds
	Corrected   bool    `json:"proportion_adjusted"` // the proportion was 0, ½ or 1
}

// noise is s, the scaling convention of the method.
const noise = 0.1

// ErrNoDiffusion says that accuracy and times are such as no diffusion produces.
var ErrNoDiffusion = errors.New("no diffusion fits")

// FitEZ computes the parameters from the proportion correct of n trials, and the variance
// (s²) and mean (s) of the response times of correct responses. A proportion of 0, ½ or 1
// has no solution and is moved by half a trial, 1/(2n), as the authors advise for 1.
func FitEZ(proportion, variance, mean float64, n int) (EZ, error) {
	switch {
	case !(proportion >= 0 && proportion <= 1):
		return EZ{}, fmt.Errorf("%w: proportion correct %g is not in 0 to 1", ErrNoDiffusion, proportion)
	case n < 1:
		return EZ{}, fmt.Errorf("%w: %d trials", ErrNoDiffusion, n)
	case !(variance > 0) || math.IsInf(variance, 0):
		return EZ{}, fmt.Errorf("%w: the variance of the response times is %g s²", ErrNoDiffusion, variance)
	case !(mean > 0) || math.IsInf(mean, 0):
		return EZ{}, fmt.Errorf("%w: the mean response time is %g s", ErrNoDiffusion, mean)
	}
	e := EZ{Corrected: true}
	half := 1 / (2 * float64(n))
	switch proportion {
	case 0:
		proportion = half
	case 1:
		proportion = 1 - half
	case 0.5:
		proportion = 0.5 + half
	default:
		e.Corrected = false
	}
	if proportion == 0.5 || proportion <= 0 || proportion >= 1 {
		return EZ{}, fmt.Errorf("%w: one trial tells no accuracy", ErrNoDiffusion)
	}
	const s2 = noise * noise
	l := math.Log(proportion / (1 - proportion))
	x := l * (l*proportion*proportion - l*proportion + proportion - 0.5) / variance
	e.Drift = math.Copysign(noise*math.Pow(x, 0.25), proportion-0.5)
	e.Boundary = s2 * l / e.Drift
	y := -e.Drift * e.Boundary / s2
	e.Decision = e.Boundary / (2 * e.Drift) * (1 - math.Exp(y)) / (1 + math.Exp(y))
	e.NonDecision = mean - e.Decision
	if math.IsNaN(e.Drift) || math.IsNaN(e.NonDecision) {
		return EZ{}, fmt.Errorf("%w: proportion %g, variance %g s², mean %g s", ErrNoDiffusion, proportion, variance, mean)
	}
	return e, nil
}

// Predict is the inverse: proportion correct, and variance (s²) and mean (s) of response
// times, of a diffusion with these parameters (equations 4, 6 and 9 of the paper).
func (e EZ) Predict() (proportion, variance, mean float64) {
	const s2 = noise * noise
	v, a := e.Drift, e.Boundary
	y := -v * a / s2
	proportion = 1 / (1 + math.Exp(y))
	mean = a/(2*v)*(1-math.Exp(y))/(1+math.Exp(y)) + e.NonDecision
	k := math.Exp(y) + 1
	variance = a * s2 / (2 * v * v * v) * (2*y*math.Exp(y) - math.Exp(2*y) + 1) / (k * k)
	return proportion, variance, mean
}

// Trial is one timed response.
type Trial struct {
	RT      float64 // seconds from the stimulus
	Correct bool
}

// EZEstimate are parameters from single trials.
type EZEstimate struct {
	EZ
	Trials          int     `json:"trials"`
	Proportion      float64 `json:"proportion_correct"`
	MeanCorrect     float64 `json:"mean_correct_s"`
	VarianceCorrect float64 `json:"variance_correct_s2"`
	// Warnings name the signs that the model does not hold: errors much faster or slower than
	// correct responses, left-skewed times, a non-decision time that is not positive.
	Warnings []string `json:"warnings,omitempty"`
}

// FitEZTrials computes the parameters from single trials and checks the model's
// assumptions as far as the data show them (Wagenmakers et al. 2007, p. 12).
func FitEZTrials(trials []Trial) (*EZEstimate, error) {
	var right, wrong []float64
	for i, t := range trials {
		if !(t.RT > 0) || math.IsInf(t.RT, 0) {
			return nil, fmt.Errorf("%w: response time %d is %g s", ErrNoDiffusion, i+1, t.RT)
		}
		if t.Correct {
			right = append(right, t.RT)
		} else {
			wrong = append(wrong, t.RT)
		}
	}
	if len(right) < 2 {
		return nil, fmt.Errorf("%w: %d correct responses have no variance", ErrNoDiffusion, len(right))
	}
	e := &EZEstimate{Trials: len(trials), Proportion: float64(len(right)) / float64(len(trials))}
	e.MeanCorrect, e.VarianceCorrect = moments(right)
	var err error
	if e.EZ, err = FitEZ(e.Proportion, e.VarianceCorrect, e.MeanCorrect, len(trials)); err != nil {
		return nil, err
	}
	if e.NonDecision <= 0 {
		e.Warnings = append(e.Warnings, fmt.Sprintf("the non-decision time comes out as %.3g s: the times vary too much for their mean", e.NonDecision))
	}
	if s := skewness(right); len(right) >= 20 && s < 0 {
		e.Warnings = append(e.Warnings, fmt.Sprintf("the times are skewed to the left (%.2f); a diffusion skews them to the right", s))
	}
	if len(wrong) >= 10 {
		m, v := moments(wrong)
		t := (m - e.MeanCorrect) / math.Sqrt(v/float64(len(wrong))+e.VarianceCorrect/float64(len(right)))
		if math.Abs(t) > 3 {
			e.Warnings = append(e.Warnings, fmt.Sprintf("errors take %.3g s and correct responses %.3g s on average; the model has them equal", m, e.MeanCorrect))
		}
	}
	return e, nil
}

func moments(x []float64) (mean, variance float64) {
	n := float64(len(x))
	for _, v := range x {
		mean += v / n
	}
	for _, v := range x {
		variance += (v - mean) * (v - mean) / math.Max(n-1, 1)
	}
	return mean, variance
}

func skewness(x []float64) float64 {
	mean, variance := moments(x)
	if variance == 0 {
		return 0
	}
	sum := 0.0
	for _, v := range x {
		sum += math.Pow((v-mean)/math.Sqrt(variance), 3)
	}
	return sum / float64(len(x))
}
