package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of grating, in the order of gratingKind.Params.
const (
	gratingDirection = iota
	gratingFrequency
	gratingTemporal
	gratingContrast
	gratingPhase
	gratingWaveform
	gratingMotion
	gratingSample
	gratingReversal
	gratingWindow
	gratingWidth
	gratingHeight
	gratingEdge
)

const motionCounterphase = 1

var gratingKind = &Kind{
	Name: "grating",
	Doc: "Grating or Gabor: drifting or counterphase, sinusoidal, square-wave or without the fundamental of the square wave " +
		"(Adelson 1982, Invest Ophthalmol Vis Sci Suppl 22:91), in a hard, raised-cosine or Gaussian window. The mean luminance is the background's.",
	Params: []Param{
		gratingDirection: {Key: "direction_deg", Unit: "deg", Doc: "direction of drift, counter-clockwise from rightwards; the bars run at right angles", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		gratingFrequency: {Key: "spatial_frequency_cpd", Unit: "c/deg", Doc: "periods per degree", Min: 0.02, Max: 30, Default: []float64{1}},
		gratingTemporal:  {Key: "temporal_frequency_hz", Unit: "Hz", Doc: "periods per second; speed is temporal over spatial frequency", Min: 0, Max: 120, Default: []float64{4}},
		gratingContrast:  {Key: "contrast", Doc: "Michelson contrast of the sine or square wave", Min: 0, Max: 1, Default: []float64{0.5}},
		gratingPhase:     {Key: "phase_deg", Unit: "deg", Doc: "phase at onset; −1: random in each trial", Min: -1, Max: 360, Default: []float64{-1}},
		gratingWaveform:  {Key: "waveform", Doc: "luminance profile", Type: Choice, Options: []string{"sine", "square", "missing_fundamental"}, Default: []float64{0}},
		gratingMotion:    {Key: "motion", Doc: "drift, or two equal gratings drifting in opposite directions (counterphase flicker)", Type: Choice, Options: []string{"drift", "counterphase"}, Default: []float64{0}},
		gratingSample:    {Key: "sample_ms", Unit: "ms", Doc: "the pattern steps only every so often: sampled motion; 0: at every refresh", Min: 0, Max: 2000, Default: []float64{0}},
		gratingReversal:  {Key: "contrast_reversal", Doc: "contrast changes sign at each step, which reverses apparent motion for steps below half a period (Anstis 1970, Vision Res 10:1411)", Type: Boolean, Default: []float64{0}},
		gratingWindow:    {Key: "window", Doc: "shape of the window; it turns with direction_deg", Type: Choice, Options: []string{"circle", "rectangle", "gaussian"}, Default: []float64{0}},
		gratingWidth:     {Key: "width_deg", Unit: "deg", Doc: "extent along the drift; two standard deviations of a Gaussian window", Min: 0.1, Max: 100, Default: []float64{6}},
		gratingHeight:    {Key: "height_deg", Unit: "deg", Doc: "extent along the bars; two standard deviations of a Gaussian window", Min: 0.1, Max: 100, Default: []float64{6}},
		gratingEdge:      {Key: "edge_deg", Unit: "deg", Doc: "width of the raised-cosine edge inside the window; 0: hard", Min: 0, Max: 50, Default: []float64{0.5}},
	},
	Check: func(v Values, problem func(key, message string)) {
		checkEdge(v.Num(gratingEdge), v.Num(gratingWidth), v.Num(gratingHeight), problem)
		if v.On(gratingReversal) && v.Num(gratingSample) == 0 {
			problem("contrast_reversal", "needs steps: give sample_ms")
		}
	},
	Extent: func(v Values) (float64, float64) {
		return windowExtent(v.Choice(gratingWindow), v.Num(gratingWidth), v.Num(gratingHeight))
	},
	New: func(Values) Display { return &grating{} },
}

// checkEdge reports a raised-cosine edge that is wider than half the window.
func checkEdge(edge, width, height float64, problem func(key, message string)) {
	if edge > min(width, height)/2 {
		problem("edge_deg", "the edge must not be wider than half the window")
	}
}

// windowExtent is the square that holds a window however it is turned.
func windowExtent(window int, width, height float64) (float64, float64) {
	size := max(width, height)
	switch window {
	case WindowRect:
		size = exact.Hypot(width, height)
	case WindowGauss:
		size = float64(size * 3) // cut at three standard deviations
	}
	return size, size
}

type grating struct {
	patch    Patch
	v        Values
	interval float64
	frame    int
	hold     int     // refresh intervals per step of the pattern
	turns    float64 // phase at onset in periods
}

func (g *grating) Size() (dots, patches, batches int) { return 0, 1, 1 }

func (g *grating) Begin(t Trial) {
	g.v, g.interval, g.frame = t.Values, t.IntervalMs, 0
	g.hold = holdFrames(g.v.Num(gratingSample), t.IntervalMs)
	g.turns = onsetTurns(g.v.Num(gratingPhase), t)
	g.draw(t.XDeg, t.YDeg)
}

// draw makes the patch of the values.
func (g *grating) draw(x, y float64) {
	g.patch = Patch{
		XDeg: float32(x), YDeg: float32(y),
		WidthDeg: float32(g.v.Num(gratingWidth)), HeightDeg: float32(g.v.Num(gratingHeight)),
		OrientationDeg:      float32(g.v.Num(gratingDirection)),
		SpatialFrequencyCPD: float32(g.v.Num(gratingFrequency)),
		Contrast:            float32(g.v.Num(gratingContrast)),
		RampDeg:             float32(g.v.Num(gratingEdge)),
		Carrier:             float32(CarrierSine + g.v.Choice(gratingWaveform)),
		Window:              float32(g.v.Choice(gratingWindow)),
		Mode:                PatchAdd,
	}
}

// Change implements Changer. Another temporal frequency keeps the phase of a drift.
func (g *grating) Change(i int, x float64) bool {
	switch i {
	case gratingTemporal:
		if g.v.Choice(gratingMotion) == motionCounterphase {
			return false
		}
		g.turns += g.moved(x) - g.moved(g.v.Num(i))
	case gratingDirection, gratingFrequency, gratingContrast:
	default:
		return false
	}
	g.v[i][0] = x
	g.draw(float64(g.patch.XDeg), float64(g.patch.YDeg))
	return true
}

// moved is how many periods a temporal frequency has taken the pattern.
func (g *grating) moved(hz float64) float64 {
	return float64(hz * (float64(g.frame/g.hold*g.hold) * g.interval / 1000))
}

// holdFrames is how many refresh intervals a step of so many ms lasts, at least one.
func holdFrames(ms, intervalMs float64) int {
	return max(1, int(exact.Round(ms/intervalMs)))
}

// onsetTurns is a phase at onset in periods, drawn at random for −1.
func onsetTurns(phaseDeg float64, t Trial) float64 {
	if phaseDeg < 0 {
		s := random.NewSub(t.Seed, t.Number, random.PurposePhase, t.Place)
		return s.Float64()
	}
	return phaseDeg / 360
}

// radiansOfTurns is a phase in radians, −π to π, so that float32 keeps its precision.
func radiansOfTurns(turns float64) float32 {
	return float32(float64(2*exact.Pi) * (turns - math.Floor(turns+0.5)))
}

func (g *grating) Step(n int, l *List) {
	g.frame += n
	step := g.frame / g.hold
	moved := g.moved(g.v.Num(gratingTemporal))
	p := g.patch
	if g.v.Choice(gratingMotion) == motionCounterphase {
		p.PhaseRad = radiansOfTurns(g.turns)
		p.Contrast = float32(p.Contrast * float32(exact.Cos(float64(float64(2*exact.Pi)*moved))))
	} else {
		p.PhaseRad = radiansOfTurns(g.turns - moved)
	}
	if g.v.On(gratingReversal) && step%2 == 1 {
		p.Contrast = -p.Contrast
	}
	l.AddPatch(p)
}

func (g *grating) Truths(add func(name string, value float64)) {
	add("phase_at_onset_deg", float64(360*g.turns))
	if g.v.Choice(gratingMotion) != motionCounterphase {
		add("speed_deg_per_s", g.v.Num(gratingTemporal)/g.v.Num(gratingFrequency))
	}
	add("step_deg", g.v.Num(gratingTemporal)*(float64(g.hold)*g.interval/1000)/g.v.Num(gratingFrequency))
}
