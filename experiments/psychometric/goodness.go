package psychometric

import "math"

// LevelFit is one level seen against the fitted function.
type LevelFit struct {
	Level
	Predicted float64 `json:"predicted"`
	// Residual is the deviance residual: the signed square root of the level's part of the deviance.
	Residual float64 `json:"deviance_residual"`
	// Without is the threshold fitted without this level, in the level's unit, and
	// WithoutValid says whether there is one.
	Without      float64 `json:"threshold_without"`
	WithoutValid bool    `json:"threshold_without_valid"`
	// Shift is (Without − threshold) ÷ standard error on the scale; 0 where either is missing.
	Shift float64 `json:"shift_in_standard_errors"`
}

// LevelFits gives, for every level, the fitted proportion, its deviance residual and
// its influence: what the threshold would be without it.
func (r *Result) LevelFits() []LevelFit {
	list := make([]LevelFit, len(r.Data))
	for i, l := range r.Data {
		yes := r.Predict(l.X)
		f := LevelFit{Level: l, Predicted: yes, Residual: devianceResidual(l, yes)}
		rest := append(append(Data(nil), r.Data[:i]...), r.Data[i+1:]...)
		if without, err := Maximise(rest, r.Model); err == nil && without.Threshold.Valid {
			f.Without, f.WithoutValid = without.Threshold.Value, true
			if r.OnScale.SE > 0 {
				f.Shift = (without.OnScale.Value - r.OnScale.Value) / r.OnScale.SE
			}
		}
		list[i] = f
	}
	return list
}

// devianceResidual is sign(K/N − P) √(2 (ln-likelihood at K/N − ln-likelihood at P)).
func devianceResidual(l Level, yes float64) float64 {
	n, k := float64(l.N), float64(l.K)
	part := logLikelihood(n, k, k/n, 1-k/n) - logLikelihood(n, k, yes, 1-yes)
	return math.Copysign(math.Sqrt(2*math.Max(part, 0)), k/n-yes)
}

// ResidualTrends are correlations of the deviance residuals that a good fit leaves
// near 0: with the predicted proportion (a wrong shape) and with the order of the
// levels (a trend). They are 0 for fewer than 3 levels.
func (r *Result) ResidualTrends() (withPrediction, withLevel float64) {
	n := len(r.Data)
	if n < 3 {
		return 0, 0
	}
	residual, predicted, order := make([]float64, n), make([]float64, n), make([]float64, n)
	for i, l := range r.Data {
		predicted[i] = r.Predict(l.X)
		residual[i] = devianceResidual(l, predicted[i])
		order[i] = float64(i)
	}
	return correlation(residual, predicted), correlation(residual, order)
}

func correlation(x, y []float64) float64 {
	mx, my := mean(x), mean(y)
	var xx, yy, xy float64
	for i := range x {
		xx += (x[i] - mx) * (x[i] - mx)
		yy += (y[i] - my) * (y[i] - my)
		xy += (x[i] - mx) * (y[i] - my)
	}
	if xx <= 0 || yy <= 0 {
		return 0
	}
	return clamp(xy/math.Sqrt(xx*yy), -1, 1)
}

func mean(x []float64) float64 {
	sum := 0.0
	for _, v := range x {
		sum += v
	}
	return sum / float64(len(x))
}
