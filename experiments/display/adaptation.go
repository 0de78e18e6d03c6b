package display

import "distal/experiments/exact"

// Parameters of adaptation, in the order of adaptationKind.Params.
const (
	adaptationDirection = iota
	adaptationAdaptMs
	adaptationGapMs
	adaptationPattern
	adaptationSpeed
	adaptationContrast
	adaptationTest
	adaptationTestSpeed
	adaptationTestContrast
	adaptationFlicker
	adaptationFrequency
	adaptationDensity
	adaptationDiameter
	adaptationWidth
	adaptationEdge
)

const (
	patternGrating = iota
	patternDots
)

const (
	testStill = iota
	testFlicker
	testDrift
)

var adaptationKind = &Kind{
	Name: "adaptation",
	Doc: "Motion after-effect (Mather, Verstraten and Anstis 1998, The motion aftereffect, MIT Press): a moving pattern for adapt_ms, a pause, " +
		"then a test that goes on to the end of the stimulus. The test starts where adaptation stopped. Long adaptation and top-ups are blocks or conditions with different adapt_ms.",
	Params: []Param{
		adaptationDirection:    {Key: "direction_deg", Unit: "deg", Doc: "direction of the adapting motion", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		adaptationAdaptMs:      {Key: "adapt_ms", Unit: "ms", Doc: "how long the adapting motion lasts; 0: the test alone", Min: 0, Max: 300000, Default: []float64{5000}},
		adaptationGapMs:        {Key: "gap_ms", Unit: "ms", Doc: "empty pause before the test", Min: 0, Max: 60000, Default: []float64{0}},
		adaptationPattern:      {Key: "pattern", Doc: "a grating, or a field of dots", Type: Choice, Options: []string{"grating", "dots"}, Default: []float64{patternGrating}},
		adaptationSpeed:        {Key: "speed_deg_per_s", Unit: "deg/s", Doc: "of the adapting motion", Min: 0, Max: 100, Default: []float64{4}},
		adaptationContrast:     {Key: "contrast", Doc: "of the adapting pattern: Michelson of the grating, Weber of the dots", Min: 0, Max: 1, Default: []float64{0.8}},
		adaptationTest:         {Key: "test", Doc: "a still pattern, one that flickers in counterphase (dots: all in random directions), or one that drifts to null the after-effect", Type: Choice, Options: []string{"still", "flicker", "drift"}, Default: []float64{testStill}},
		adaptationTestSpeed:    {Key: "test_speed_deg_per_s", Unit: "deg/s", Doc: "of a drifting test along direction_deg, negative against it; of the dots in a flickering one", Min: -100, Max: 100, Default: []float64{0}},
		adaptationTestContrast: {Key: "test_contrast", Doc: "of the test pattern", Min: 0, Max: 1, Default: []float64{0.4}},
		adaptationFlicker:      {Key: "flicker_hz", Unit: "Hz", Doc: "of a flickering test", Min: 0, Max: 60, Default: []float64{4}},
		adaptationFrequency:    {Key: "spatial_frequency_cpd", Unit: "c/deg", Doc: "of the grating", Min: 0.02, Max: 30, Default: []float64{1}},
		adaptationDensity:      {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "of the dots", Min: 0.01, Max: 100, Default: []float64{4}},
		adaptationDiameter:     {Key: "dot_diameter_deg", Unit: "deg", Doc: "of a dot", Min: 0.01, Max: 5, Default: []float64{0.12}},
		adaptationWidth:        {Key: "width_deg", Unit: "deg", Doc: "diameter of the field", Min: 0.2, Max: 100, Default: []float64{8}},
		adaptationEdge:         {Key: "edge_deg", Unit: "deg", Doc: "width of the grating's raised-cosine edge, inside", Min: 0, Max: 30, Default: []float64{0.5}},
	},
	Check: func(v Values, problem func(key, message string)) {
		w := v.Num(adaptationWidth)
		checkEdge(v.Num(adaptationEdge), w, w, problem)
		if v.Choice(adaptationPattern) == patternDots {
			checkCount(fieldCount(v.Num(adaptationDensity), true, w, w), "density_per_deg2", problem)
		}
	},
	Extent: func(v Values) (float64, float64) {
		w := v.Num(adaptationWidth) + v.Num(adaptationDiameter)
		return w, w
	},
	New: func(Values) Display { return &adaptation{} },
}

type adaptation struct {
	v             Values
	dots          field
	random        [maxFieldDots][2]float64 // directions of a flickering test's dots
	x, y          float64
	frame         int
	interval      float64
	adaptEnd, gap int // refresh intervals
	turns         float64
	sin, cos      float64
}

func (a *adaptation) Size() (dots, patches, batches int) { return maxFieldDots, 1, 1 }

func (a *adaptation) Begin(t Trial) {
	a.v, a.x, a.y, a.frame, a.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	a.adaptEnd = int(exact.Round(a.v.Num(adaptationAdaptMs) / t.IntervalMs))
	a.gap = int(exact.Round(a.v.Num(adaptationGapMs) / t.IntervalMs))
	a.turns = onsetTurns(-1, t)
	a.sin, a.cos = exact.SinCos(exact.Radians(a.v.Num(adaptationDirection)))
	if a.v.Choice(adaptationPattern) == patternDots {
		w := a.v.Num(adaptationWidth)
		a.dots.open(t, 0, fieldCount(a.v.Num(adaptationDensity), true, w, w), true, w, w, 0)
		for i := range a.dots.x {
			a.random[i][0], a.random[i][1] = exact.SinCos(float64(float64(2*exact.Pi) * a.dots.life.Float64()))
		}
		a.steer()
	}
}

// Change implements Changer: speed and contrast of the test, to null the
// after-effect. A grating keeps its phase.
func (a *adaptation) Change(i int, x float64) bool {
	switch i {
	case adaptationTestSpeed:
		if a.testing() && a.v.Choice(adaptationTest) == testDrift {
			perFrame := a.v.Num(adaptationFrequency) * a.interval / 1000
			a.turns += float64(float64((x-a.v.Num(i))*perFrame) * float64(a.frame-a.adaptEnd-a.gap))
		}
	case adaptationTestContrast:
	default:
		return false
	}
	a.v[i][0] = x
	if a.v.Choice(adaptationPattern) == patternDots {
		a.steer()
	}
	return true
}

// adapting, and after the pause testing, tell in which part the frame is.
func (a *adaptation) adapting() bool { return a.frame < a.adaptEnd }
func (a *adaptation) testing() bool  { return a.frame >= a.adaptEnd+a.gap }

func (a *adaptation) Step(n int, l *List) {
	if a.v.Choice(adaptationPattern) == patternDots {
		a.stepDots(n, l)
		return
	}
	a.frame += n
	if p, shown := a.grating(); shown {
		l.AddPatch(p)
	}
}

// grating is the patch of the current frame, and whether there is one.
func (a *adaptation) grating() (Patch, bool) {
	w, frequency := float32(a.v.Num(adaptationWidth)), a.v.Num(adaptationFrequency)
	p := Patch{
		XDeg: float32(a.x), YDeg: float32(a.y), WidthDeg: w, HeightDeg: w,
		OrientationDeg: float32(a.v.Num(adaptationDirection)), SpatialFrequencyCPD: float32(frequency),
		RampDeg: float32(a.v.Num(adaptationEdge)), Carrier: CarrierSine, Window: WindowDisc, Mode: PatchAdd,
	}
	perFrame := frequency * a.interval / 1000
	moved := float64(float64(a.v.Num(adaptationSpeed)*perFrame) * float64(min(a.frame, a.adaptEnd)))
	if a.adapting() {
		p.Contrast = float32(a.v.Num(adaptationContrast))
		p.PhaseRad = radiansOfTurns(a.turns - moved)
		return p, true
	}
	if !a.testing() {
		return p, false
	}
	since := float64(a.frame - a.adaptEnd - a.gap)
	p.Contrast = float32(a.v.Num(adaptationTestContrast))
	switch a.v.Choice(adaptationTest) {
	case testFlicker:
		p.Contrast = float32(p.Contrast * float32(exact.Cos(float64(float64(2*exact.Pi)*a.v.Num(adaptationFlicker)*(since*a.interval/1000)))))
	case testDrift:
		moved += float64(float64(a.v.Num(adaptationTestSpeed)*perFrame) * since)
	}
	p.PhaseRad = radiansOfTurns(a.turns - moved)
	return p, true
}

// stepDots moves the dots through every interval, since they change their motion on the way.
func (a *adaptation) stepDots(n int, l *List) {
	for range n {
		if a.adapting() || a.testing() {
			a.dots.advance()
		}
		a.frame++
		if a.frame == a.adaptEnd || a.frame == a.adaptEnd+a.gap {
			a.steer()
		}
	}
	contrast := a.v.Num(adaptationContrast)
	if !a.adapting() {
		contrast = a.v.Num(adaptationTestContrast)
		if !a.testing() {
			return
		}
	}
	diameter := float32(a.v.Num(adaptationDiameter))
	for i := range a.dots.x {
		l.AddDot(Dot{float32(a.x + a.dots.x[i]), float32(a.y + a.dots.y[i]), diameter, float32(contrast)})
	}
}

// steer gives the dots the velocities of the part that begins.
func (a *adaptation) steer() {
	seconds := a.interval / 1000
	step := float64(a.v.Num(adaptationSpeed) * seconds)
	if a.testing() {
		step = float64(a.v.Num(adaptationTestSpeed) * seconds)
		switch a.v.Choice(adaptationTest) {
		case testStill:
			step = 0
		case testFlicker:
			for i := range a.dots.vx {
				a.dots.vx[i], a.dots.vy[i] = float64(step*a.random[i][1]), float64(step*a.random[i][0])
			}
			return
		}
	}
	a.dots.drive(float64(step*a.cos), float64(step*a.sin))
}

func (a *adaptation) Truths(add func(name string, value float64)) {
	add("adapt_ms", float64(float64(a.adaptEnd)*a.interval))
	add("test_onset_ms", float64(float64(a.adaptEnd+a.gap)*a.interval))
}
