package psychometric

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Match is the outcome of matching a test to a standard.
type Match struct {
	// PSE is the point of subjective equality in the level's unit.
	PSE Estimate `json:"pse"`
	// JND is the just noticeable difference: half the distance on the scale between the
	// levels judged greater in 25% and in 75% of the cases, lapses apart (log10 units on a
	// log10 scale).
	JND Estimate `json:"jnd_on_scale"`
	// Factor is 10^JND on a log10 scale, so that Factor − 1 is the Weber fraction; 0 on a linear scale.
	Factor float64 `json:"factor"`
	// ConstantError is PSE − standard on the scale.
	ConstantError float64 `json:"constant_error_on_scale"`
	Explanation   string  `json:"explanation"`
}

// MatchFromJudgements takes a match from "greater or less" judgements: K of N judged
// greater at each level. m is completed to what such judgements mean: no guess rate, and
// lapses towards both answers alike. standard is in the level's unit.
func MatchFromJudgements(d Data, m Model, standard float64) (*Match, error) {
	m.Guess, m.Symmetric, m.Criterion = 0, true, AtShare(0.5)
	r, err := Fit(d, m)
	if err != nil {
		return nil, err
	}
	if err := m.checkStandard(standard); err != nil {
		return nil, err
	}
	out := &Match{PSE: r.Threshold, Explanation: r.Explanation}
	out.JND.Interval = Interval{0, math.Inf(1), true, true}
	if r.Threshold.Valid {
		out.ConstantError = r.OnScale.Value - m.onScale(standard)
	}
	half := (m.Shape.Quantile(0.75) - m.Shape.Quantile(0.25)) / 2
	if s := r.Slope; s.Valid {
		out.JND.Valid, out.JND.Value = true, half/s.Value
		out.JND.SE, out.JND.SEObserved = half*s.SE/(s.Value*s.Value), half*s.SEObserved/(s.Value*s.Value)
	}
	s := r.Slope.Interval
	out.JND.Interval.OpenLow, out.JND.Interval.OpenHigh = s.OpenHigh, s.OpenLow
	if s.High > 0 && !s.OpenHigh {
		out.JND.Interval.Low = half / s.High
	}
	if s.Low > 0 && !s.OpenLow {
		out.JND.Interval.High = half / s.Low
	}
	out.setFactor(m)
	return out, nil
}

func (m Model) checkStandard(standard float64) error {
	if math.IsNaN(standard) || math.IsInf(standard, 0) || m.logarithmic() && standard <= 0 {
		return fmt.Errorf("standard %g has no place on a %v scale", standard, m.Scale)
	}
	return nil
}

func (out *Match) setFactor(m Model) {
	if m.logarithmic() && out.JND.Valid {
		out.Factor = math.Pow(10, out.JND.Value)
	}
}

// ErrTooFewSettings says that a spread needs at least two settings.
var ErrTooFewSettings = errors.New("a match by adjustment needs at least two settings")

// MatchFromSettings takes a match from repeated adjustments: PSE is the mean on the scale,
// with Student's interval, and JND 0.6745 standard deviations, as for a normal function,
// with the χ² interval of a standard deviation.
func MatchFromSettings(settings []float64, scale Scale, standard, confidence float64) (*Match, error) {
	m := Model{Shape: Gaussian, Scale: scale, Confidence: confidence}
	if err := m.Check(); err != nil {
		return nil, err
	}
	if err := m.checkStandard(standard); err != nil {
		return nil, err
	}
	if len(settings) < 2 {
		return nil, ErrTooFewSettings
	}
	z := make([]float64, len(settings))
	for i, x := range settings {
		if m.checkStandard(x) != nil {
			return nil, fmt.Errorf("setting %d is %g, which has no place on a %v scale", i+1, x, scale)
		}
		z[i] = m.onScale(x)
	}
	n, center, spread := float64(len(z)), mean(z), sd(z)
	tail := (1 - m.confidence()) / 2
	se := spread / math.Sqrt(n)
	t := distuv.StudentsT{Nu: n - 1, Sigma: 1}.Quantile(1 - tail)
	out := &Match{ConstantError: center - m.onScale(standard)}
	onScale := Interval{Low: center - t*se, High: center + t*se}
	out.PSE = Estimate{Valid: true, Value: m.offScale(center), SE: se, Interval: m.intervalOffScale(onScale)}
	if m.logarithmic() {
		out.PSE.SE *= math.Ln10 * out.PSE.Value
	}
	out.PSE.SEObserved = out.PSE.SE
	half := distuv.UnitNormal.Quantile(0.75)
	chi := distuv.ChiSquared{K: n - 1}
	out.JND = Estimate{
		Valid: true, Value: half * spread,
		SE: half * spread / math.Sqrt(2*(n-1)),
		Interval: Interval{
			Low:  half * spread * math.Sqrt((n-1)/chi.Quantile(1-tail)),
			High: half * spread * math.Sqrt((n-1)/chi.Quantile(tail)),
		},
	}
	out.JND.SEObserved = out.JND.SE
	out.setFactor(m)
	out.Explanation = fmt.Sprintf("%d settings with a mean of %.4g.", len(settings), out.PSE.Value)
	return out, nil
}
