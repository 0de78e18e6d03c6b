package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of plaid, in the order of plaidKind.Params.
const (
	plaidDirection = iota
	plaidComponents
	plaidFrequencies
	plaidTemporals
	plaidContrasts
	plaidPhase
	plaidWindow
	plaidWidth
	plaidMask
	plaidEdge
)

const maxComponents = 4

var plaidKind = &Kind{
	Name: "plaid",
	Doc: "Plaid: two to four superimposed drifting gratings (Adelson and Movshon 1982, Nature 300:523). The velocities of the intersection " +
		"of constraints and of the vector sum are stored with each trial.",
	Params: []Param{
		plaidDirection:   {Key: "direction_deg", Unit: "deg", Doc: "turn of the whole plaid, counter-clockwise", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		plaidComponents:  {Key: "component_directions_deg", Unit: "deg", Doc: "drift of each component about direction_deg", Min: -360, Max: 360, Default: []float64{60, -60}, MaxCount: maxComponents},
		plaidFrequencies: {Key: "spatial_frequencies_cpd", Unit: "c/deg", Doc: "of each component; the last value holds for the rest", Min: 0.02, Max: 30, Default: []float64{1}, MaxCount: maxComponents},
		plaidTemporals:   {Key: "temporal_frequencies_hz", Unit: "Hz", Doc: "of each component; the last value holds for the rest", Min: -120, Max: 120, Default: []float64{2}, MaxCount: maxComponents},
		plaidContrasts:   {Key: "contrasts", Doc: "Michelson contrast of each component; the last value holds for the rest", Min: 0, Max: 1, Default: []float64{0.25}, MaxCount: maxComponents},
		plaidPhase:       {Key: "phase_deg", Unit: "deg", Doc: "phase of all components at onset; −1: each at random in each trial", Min: -1, Max: 360, Default: []float64{-1}},
		plaidWindow:      {Key: "window", Doc: "shape of the window", Type: Choice, Options: []string{"circle", "gaussian"}, Default: []float64{0}},
		plaidWidth:       {Key: "width_deg", Unit: "deg", Doc: "diameter of the window; two standard deviations of a Gaussian one", Min: 0.1, Max: 100, Default: []float64{8}},
		plaidMask:        {Key: "mask_deg", Unit: "deg", Doc: "diameter of a disc of the background over the middle, which keeps gaze off the intersections; 0: none", Min: 0, Max: 100, Default: []float64{0}},
		plaidEdge:        {Key: "edge_deg", Unit: "deg", Doc: "width of the raised-cosine edge inside the window; 0: hard", Min: 0, Max: 50, Default: []float64{0.5}},
	},
	Check: func(v Values, problem func(key, message string)) {
		checkEdge(v.Num(plaidEdge), v.Num(plaidWidth), v.Num(plaidWidth), problem)
		if len(v[plaidComponents]) < 2 {
			problem("component_directions_deg", "a plaid has two to four components: give a list")
		}
		if x, _, _ := IntersectConstraints(v[plaidComponents], v[plaidComponents]); math.IsNaN(x) {
			problem("component_directions_deg", "at least two components must differ in orientation")
		}
		sum := 0.0
		for i := range v[plaidComponents] {
			sum += at(v[plaidContrasts], i)
		}
		if sum > 1+1e-9 {
			problem("contrasts", "together the components must not exceed a contrast of 1")
		}
	},
	Extent: func(v Values) (float64, float64) {
		return windowExtent(int(plaidWindowOf(v)), v.Num(plaidWidth), v.Num(plaidWidth))
	},
	New: func(Values) Display { return &plaid{} },
}

// at is item i of a list whose last value holds for the rest.
func at(list []float64, i int) float64 { return list[min(i, len(list)-1)] }

func plaidWindowOf(v Values) float32 {
	if v.Choice(plaidWindow) == 1 {
		return WindowGauss
	}
	return WindowDisc
}

type plaid struct {
	v        Values
	interval float64
	frame    int
	n        int
	turns    [maxComponents]float64
	x, y     float64
}

func (p *plaid) Size() (dots, patches, batches int) { return 0, maxComponents + 1, 1 }

func (p *plaid) Begin(t Trial) {
	p.v, p.interval, p.frame = t.Values, t.IntervalMs, 0
	p.n = len(p.v[plaidComponents])
	p.x, p.y = t.XDeg, t.YDeg
	s := random.NewSub(t.Seed, t.Number, random.PurposePhase, t.Place)
	for i := range p.turns {
		p.turns[i] = s.Float64()
		if phase := p.v.Num(plaidPhase); phase >= 0 {
			p.turns[i] = phase / 360
		}
	}
}

func (p *plaid) Step(n int, l *List) {
	p.frame += n
	seconds := float64(p.frame) * p.interval / 1000
	for i := range p.n {
		l.AddPatch(Patch{
			XDeg: float32(p.x), YDeg: float32(p.y),
			WidthDeg: float32(p.v.Num(plaidWidth)), HeightDeg: float32(p.v.Num(plaidWidth)),
			OrientationDeg:      float32(p.v.Num(plaidDirection) + p.v[plaidComponents][i]),
			SpatialFrequencyCPD: float32(at(p.v[plaidFrequencies], i)),
			PhaseRad:            radiansOfTurns(p.turns[i] - float64(at(p.v[plaidTemporals], i)*seconds)),
			Contrast:            float32(at(p.v[plaidContrasts], i)),
			RampDeg:             float32(p.v.Num(plaidEdge)),
			Carrier:             CarrierSine, Window: plaidWindowOf(p.v), Mode: PatchAdd,
		})
	}
	if d := float32(p.v.Num(plaidMask)); d > 0 {
		l.AddPatch(Patch{XDeg: float32(p.x), YDeg: float32(p.y), WidthDeg: d, HeightDeg: d, Window: WindowDisc, Mode: PatchCover})
	}
}

func (p *plaid) Truths(add func(name string, value float64)) {
	var directions, speeds [maxComponents]float64
	for i := range p.n {
		directions[i] = p.v.Num(plaidDirection) + p.v[plaidComponents][i]
		speeds[i] = at(p.v[plaidTemporals], i) / at(p.v[plaidFrequencies], i)
	}
	x, y, residual := IntersectConstraints(directions[:p.n], speeds[:p.n])
	add("constraints_direction_deg", exact.Degrees(exact.Atan2(y, x)))
	add("constraints_speed_deg_per_s", exact.Hypot(x, y))
	add("constraints_residual_deg_per_s", residual)
	x, y = SumVectors(directions[:p.n], speeds[:p.n])
	add("sum_direction_deg", exact.Degrees(exact.Atan2(y, x)))
	add("sum_speed_deg_per_s", exact.Hypot(x, y))
}

// IntersectConstraints is the velocity (x, y) whose parts along all directions
// are the components' speeds: n·v = s (Adelson and Movshon 1982, Nature
// 300:523). More than two components are met in the least-squares sense, with the
// root-mean-square miss as residual. Parallel components have no intersection: NaN.
func IntersectConstraints(directionsDeg, speeds []float64) (x, y, residual float64) {
	var xx, xy, yy, bx, by float64
	for i, d := range directionsDeg {
		sin, cos := exact.SinCos(exact.Radians(d))
		xx += float64(cos * cos)
		xy += float64(cos * sin)
		yy += float64(sin * sin)
		bx += float64(speeds[i] * cos)
		by += float64(speeds[i] * sin)
	}
	det := float64(xx*yy) - float64(xy*xy)
	if det < 1e-9 {
		return math.NaN(), math.NaN(), math.NaN()
	}
	x = (float64(bx*yy) - float64(by*xy)) / det
	y = (float64(by*xx) - float64(bx*xy)) / det
	for i, d := range directionsDeg {
		sin, cos := exact.SinCos(exact.Radians(d))
		miss := float64(x*cos) + float64(y*sin) - speeds[i]
		residual += float64(miss * miss)
	}
	return x, y, math.Sqrt(residual / float64(len(speeds)))
}

// SumVectors is the sum of the components' own velocities.
func SumVectors(directionsDeg, speeds []float64) (x, y float64) {
	for i, d := range directionsDeg {
		sin, cos := exact.SinCos(exact.Radians(d))
		x += float64(speeds[i] * cos)
		y += float64(speeds[i] * sin)
	}
	return x, y
}
