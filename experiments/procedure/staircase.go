package procedure

import "distal/experiments/exact"

// Target is the proportion correct at which a transformed or weighted up-down
// staircase converges when steps are small against the spread of the function:
// p^down = up/(up + downStep), i.e. p = (1/(1 + ratio))^(1/down) for up = 1
// (Levitt 1971, J Acoust Soc Am 49:467; Kaernbach 1991, Percept Psychophys
// 49:227; García-Pérez 1998, Vision Res 38:1861). For up > 1 and down = 1 the
// same holds for the proportion wrong.
func Target(s Spec) float64 {
	ratio := s.StepRatio
	if ratio <= 0 {
		ratio = 1
	}
	if s.Up > 1 {
		return 1 - exact.Pow(ratio/(1+ratio), 1/float64(s.Up))
	}
	return exact.Pow(1/(1+ratio), 1/float64(max(s.Down, 1)))
}

// staircase is a transformed, weighted or unequal-step up-down track.
type staircase struct {
	spec      Spec
	at        float64 // on the scale
	low, high float64
	right     int // in a row
	wrong     int
	direction int // of the last step: +1 easier, −1 harder, 0 none yet
	reversals []float64
	trials    int
	level     [1]float64
}

func newStaircase(s Spec) *staircase {
	t := &staircase{spec: s, at: onScale(s.Scale, s.Start), low: onScale(s.Scale, s.Min), high: onScale(s.Scale, s.Max)}
	t.reversals = make([]float64, 0, 64)
	return t
}

func onScale(scale Scale, x float64) float64 {
	if scale == Log10 {
		return exact.Log10(x)
	}
	return x
}

func offScale(scale Scale, x float64) float64 {
	if scale == Log10 {
		return exact.Exp10(x)
	}
	return x
}

func (t *staircase) Next() ([]float64, bool) {
	// Bounds are given back exactly, not through logarithm and power.
	switch t.at {
	case t.low:
		t.level[0] = t.spec.Min
	case t.high:
		t.level[0] = t.spec.Max
	default:
		t.level[0] = offScale(t.spec.Scale, t.at)
	}
	return t.level[:], !t.ended()
}

func (t *staircase) ended() bool {
	if t.trials >= t.spec.MaxTrials {
		return true
	}
	return t.spec.Reversals > 0 && len(t.reversals) >= t.spec.Reversals && t.trials >= t.spec.MinTrials
}

func (t *staircase) Record(outcome int) {
	t.trials++
	if outcome > 0 {
		t.right++
		t.wrong = 0
		if t.right >= t.spec.Down {
			t.right = 0
			t.move(-1)
		}
		return
	}
	t.wrong++
	t.right = 0
	if t.wrong >= t.spec.Up {
		t.wrong = 0
		t.move(1)
	}
}

// move steps towards easier (+1) or harder (−1).
func (t *staircase) move(direction int) {
	if t.direction != 0 && direction != t.direction {
		t.reversals = append(t.reversals, t.at)
	}
	t.direction = direction
	step := t.spec.StepsUp[min(len(t.reversals), len(t.spec.StepsUp)-1)]
	if direction < 0 {
		step = float64(step * t.spec.StepRatio)
	}
	t.at = min(max(t.at+float64(float64(direction*t.spec.EasierIs)*step), t.low), t.high)
}

func (t *staircase) Trials() int { return t.trials }

func (t *staircase) Progress() float64 {
	p := float64(t.trials) / float64(t.spec.MaxTrials)
	if t.spec.Reversals > 0 {
		p = max(p, float64(len(t.reversals))/float64(t.spec.Reversals))
	}
	return min(p, 1)
}

// Estimate is the mean of the reversal levels on the scale, an even number of
// the last ones so that peaks and troughs weigh the same (Levitt 1971).
func (t *staircase) Estimate() Estimate {
	used := t.reversals[min(t.spec.Discard, len(t.reversals)):]
	if len(used)%2 == 1 {
		used = used[1:]
	}
	e := meanOf(t.spec.Scale, used, "there are too few reversals for an estimate")
	e.Reversals = len(t.reversals)
	return e
}
