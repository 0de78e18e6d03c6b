package procedure

import (
	"math"

	"distal/experiments/random"
)

// limits is the method of limits (Fechner GT 1860, Elemente der Psychophysik):
// series of even steps, by turns towards harder and towards easier. A series
// ends when the answer changes; its turning point lies halfway, on the scale,
// between the last two levels. Series begin 0 to 3 steps inside the range, at
// random, so that steps cannot be counted; the direction of the first is drawn
// too. A series that reaches the other end without a change has no turning point.
type limits struct {
	spec      Spec
	stream    random.Stream
	from, to  float64 // on the scale: where the series began, where it would end
	done      int     // steps of the series
	steps     int     // that fit into it
	first     int     // answer that the series began with
	towards   int     // +1 easier, −1 harder
	trials    int
	series    int
	turning   []float64
	level     [1]float64
	increment float64 // on the scale
}

func newLimits(s Spec, stream random.Stream) *limits {
	l := &limits{spec: s, stream: stream, towards: 1, turning: make([]float64, 0, s.Reversals)}
	if l.stream.Intn(2) == 0 {
		l.towards = -1
	}
	l.begin()
	return l
}

func (l *limits) begin() {
	l.from, l.to = onScale(l.spec.Scale, l.spec.Min), onScale(l.spec.Scale, l.spec.Max)
	if l.towards*l.spec.EasierIs < 0 {
		l.from, l.to = l.to, l.from
	}
	l.increment = l.spec.StepsUp[0]
	if l.to < l.from {
		l.increment = -l.increment
	}
	l.steps = int(math.Floor(float64((l.to-l.from)/l.increment) + 1e-9))
	l.done = min(l.stream.Intn(4), max(0, l.steps-2))
	l.first = -1
}

func (l *limits) at(step int) float64 { return l.from + float64(float64(step)*l.increment) }

func (l *limits) Next() ([]float64, bool) {
	x := offScale(l.spec.Scale, l.at(l.done))
	l.level[0] = min(max(x, l.spec.Min), l.spec.Max)
	return l.level[:], l.trials < l.spec.MaxTrials && l.series < l.spec.Reversals
}

func (l *limits) Record(outcome int) {
	l.trials++
	if l.first < 0 {
		// The easier a series is at first, the likelier is a yes: anything else
		// is a change already.
		l.first = 0
		if l.towards < 0 {
			l.first = 1
		}
		if min(outcome, 1) != l.first {
			l.end(false)
			return
		}
	}
	if min(outcome, 1) != l.first {
		l.end(true)
		return
	}
	if l.done++; l.done > l.steps {
		l.end(false)
	}
}

func (l *limits) end(turned bool) {
	if turned {
		l.turning = append(l.turning, (l.at(l.done)+l.at(l.done-1))/2)
	}
	l.series++
	l.towards = -l.towards
	l.begin()
}

func (l *limits) Trials() int { return l.trials }

func (l *limits) Progress() float64 {
	return min(1, max(float64(l.series)/float64(l.spec.Reversals), float64(l.trials)/float64(l.spec.MaxTrials)))
}

// Estimate is the mean of the turning points on the scale.
func (l *limits) Estimate() Estimate {
	return meanOf(l.spec.Scale, l.turning, "fewer than two series have turned")
}

// meanOf is the mean of values on the scale with their standard deviation.
func meanOf(scale Scale, list []float64, few string) Estimate {
	e := Estimate{Reversals: len(list)}
	if len(list) < 2 {
		e.Reason = few
		return e
	}
	mean, square := 0.0, 0.0
	for _, x := range list {
		mean += x / float64(len(list))
	}
	for _, x := range list {
		square += float64((x - mean) * (x - mean))
	}
	e.Valid, e.Threshold = true, offScale(scale, mean)
	e.SDLog10 = math.Sqrt(square / float64(len(list)-1))
	return e
}

// adjustment is the method of adjustment: each trial begins at a level drawn
// evenly on the scale, from the upper and the lower half of the range by turns
// in shuffled pairs, so that settings are approached from both sides equally
// often. The estimate is the mean of the settings.
type adjustment struct {
	spec     Spec
	stream   random.Stream
	upper    bool // the next trial begins in the upper half
	trials   int
	settings []float64 // on the scale
	level    [1]float64
}

func newAdjustment(s Spec, stream random.Stream) *adjustment {
	a := &adjustment{spec: s, stream: stream}
	a.draw()
	return a
}

func (a *adjustment) draw() {
	if a.trials%2 == 0 {
		a.upper = a.stream.Intn(2) == 0
	} else {
		a.upper = !a.upper
	}
	share := a.stream.Float64() / 2
	if a.upper {
		share += 0.5
	}
	low, high := onScale(a.spec.Scale, a.spec.Min), onScale(a.spec.Scale, a.spec.Max)
	a.level[0] = min(max(offScale(a.spec.Scale, low+float64((high-low)*share)), a.spec.Min), a.spec.Max)
}

func (a *adjustment) Next() ([]float64, bool) { return a.level[:], a.trials < a.spec.MaxTrials }

// Set takes what the trial was set to.
func (a *adjustment) Set(x float64) {
	if on := onScale(a.spec.Scale, x); !math.IsInf(on, 0) && !math.IsNaN(on) {
		a.settings = append(a.settings, on)
	}
}

func (a *adjustment) Record(int) {
	a.trials++
	a.draw()
}

func (a *adjustment) Trials() int { return a.trials }

func (a *adjustment) Progress() float64 { return min(1, float64(a.trials)/float64(a.spec.MaxTrials)) }

func (a *adjustment) Estimate() Estimate {
	return meanOf(a.spec.Scale, a.settings, "there are fewer than two settings")
}

var _ Setter = (*adjustment)(nil)
