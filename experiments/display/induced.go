package display

import "distal/experiments/exact"

// Parameters of induced, in the order of inducedKind.Params.
const (
	inducedDirection = iota
	inducedTarget
	inducedSurround
	inducedPath
	inducedFrequency
	inducedCentre
	inducedInducer
	inducedWidth
	inducedHeight
	inducedLine
	inducedDensity
	inducedDot
	inducedInducerContrast
	inducedDiameter
	inducedTargetContrast
	inducedTargetX
	inducedTargetY
)

const (
	pathLinear = iota
	pathSinusoidal
)

const (
	inducerFrame = iota
	inducerDots
)

var inducedKind = &Kind{
	Name: "induced",
	Doc: "Induced motion (Duncker 1929, Psychol Forsch 12:180): a target within a moving frame or before moving dots. " +
		"Both velocities are along direction_deg; the target's own velocity nulls the motion that the surround induces.",
	Params: []Param{
		inducedDirection:       {Key: "direction_deg", Unit: "deg", Doc: "axis of both motions, counter-clockwise from rightwards", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		inducedTarget:          {Key: "target_speed_deg_per_s", Unit: "deg/s", Doc: "velocity of the target, negative against direction_deg; the peak of a sinusoidal path", Min: -50, Max: 50, Default: []float64{0}},
		inducedSurround:        {Key: "surround_speed_deg_per_s", Unit: "deg/s", Doc: "velocity of the surround; the peak of a sinusoidal path", Min: -50, Max: 50, Default: []float64{2}},
		inducedPath:            {Key: "path", Doc: "straight on, or back and forth", Type: Choice, Options: []string{"linear", "sinusoidal"}, Default: []float64{0}},
		inducedFrequency:       {Key: "frequency_hz", Unit: "Hz", Doc: "of the sinusoidal path", Min: 0.05, Max: 20, Default: []float64{0.5}},
		inducedCentre:          {Key: "centre_ms", Unit: "ms", Doc: "when frame and target of linear paths are at their own centres", Min: 0, Max: 60000, Default: []float64{500}},
		inducedInducer:         {Key: "inducer", Doc: "a rectangular frame, or a field of dots", Type: Choice, Options: []string{"frame", "dots"}, Default: []float64{0}},
		inducedWidth:           {Key: "width_deg", Unit: "deg", Doc: "width of frame or field", Min: 0.5, Max: 80, Default: []float64{10}},
		inducedHeight:          {Key: "height_deg", Unit: "deg", Doc: "height of frame or field", Min: 0.5, Max: 80, Default: []float64{6}},
		inducedLine:            {Key: "line_deg", Unit: "deg", Doc: "thickness of the frame's lines", Min: 0.02, Max: 5, Default: []float64{0.15}},
		inducedDensity:         {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "of the dots", Min: 0.01, Max: 50, Default: []float64{1}},
		inducedDot:             {Key: "dot_diameter_deg", Unit: "deg", Doc: "of a dot", Min: 0.01, Max: 5, Default: []float64{0.12}},
		inducedInducerContrast: {Key: "surround_contrast", Doc: "Weber contrast of frame or dots", Min: -1, Max: 1, Default: []float64{0.6}},
		inducedDiameter:        {Key: "target_diameter_deg", Unit: "deg", Doc: "of the target", Min: 0.02, Max: 10, Default: []float64{0.3}},
		inducedTargetContrast:  {Key: "target_contrast", Doc: "Weber contrast of the target", Min: -1, Max: 1, Default: []float64{1}},
		inducedTargetX:         {Key: "target_x_deg", Unit: "deg", Doc: "centre of the target's path to the right of the frame's", Min: -40, Max: 40, Default: []float64{0}},
		inducedTargetY:         {Key: "target_y_deg", Unit: "deg", Doc: "centre of the target's path above the frame's", Min: -40, Max: 40, Default: []float64{0}},
	},
	Check: func(v Values, problem func(key, message string)) {
		if v.Choice(inducedInducer) == inducerDots {
			checkCount(fieldCount(v.Num(inducedDensity), false, v.Num(inducedWidth), v.Num(inducedHeight)), "density_per_deg2", problem)
		}
	},
	Extent: func(v Values) (float64, float64) {
		// The frame's own travel comes on top; linear paths last as long as the task shows them.
		sweep := float64(2 * max(inducedReach(v, inducedSurround), inducedReach(v, inducedTarget)))
		return v.Num(inducedWidth) + sweep, v.Num(inducedHeight) + sweep
	},
	New: func(Values) Display { return &induced{} },
}

// inducedReach is how far a path goes from its centre: the amplitude of a
// sinusoid, the part of a linear path up to its centre.
func inducedReach(v Values, speed int) float64 {
	s := max(v.Num(speed), -v.Num(speed))
	if v.Choice(inducedPath) == pathSinusoidal {
		return s / (2 * exact.Pi * v.Num(inducedFrequency))
	}
	return s * v.Num(inducedCentre) / 1000
}

type induced struct {
	v        Values
	dots     field
	x, y     float64
	sin, cos float64
	frame    int
	interval float64
}

func (d *induced) Size() (dots, patches, batches int) { return maxFieldDots + 1, 4, 2 }

func (d *induced) Begin(t Trial) {
	d.v, d.x, d.y, d.frame, d.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	d.sin, d.cos = exact.SinCos(exact.Radians(d.v.Num(inducedDirection)))
	if d.v.Choice(inducedInducer) == inducerDots {
		w, h := d.v.Num(inducedWidth), d.v.Num(inducedHeight)
		d.dots.open(t, 0, fieldCount(d.v.Num(inducedDensity), false, w, h), false, w, h, 0)
	}
}

// Change implements Changer: the target's velocity, to null the motion induced,
// and both contrasts.
func (d *induced) Change(i int, x float64) bool {
	if i != inducedTarget && i != inducedTargetContrast && i != inducedInducerContrast {
		return false
	}
	d.v[i][0] = x
	return true
}

// travelled is how far something of that speed is along its path.
func (d *induced) travelled(speed float64, frame int) float64 {
	seconds := float64(frame) * d.interval / 1000
	if d.v.Choice(inducedPath) == pathSinusoidal {
		omega := float64(2 * exact.Pi * d.v.Num(inducedFrequency))
		return float64(speed / omega * exact.Sin(float64(omega*seconds)))
	}
	return float64(speed * (seconds - d.v.Num(inducedCentre)/1000))
}

func (d *induced) Step(n int, l *List) {
	speed := d.v.Num(inducedSurround)
	if d.v.Choice(inducedInducer) == inducerDots {
		for range n {
			step := d.travelled(speed, d.frame+1) - d.travelled(speed, d.frame)
			d.dots.drive(float64(step*d.cos), float64(step*d.sin))
			d.dots.advance()
			d.frame++
		}
		for i := range d.dots.x {
			l.AddDot(Dot{float32(d.x + d.dots.x[i]), float32(d.y + d.dots.y[i]), float32(d.v.Num(inducedDot)), float32(d.v.Num(inducedInducerContrast))})
		}
	} else {
		d.frame += n
		d.outline(d.travelled(speed, d.frame), l)
	}
	at := d.travelled(d.v.Num(inducedTarget), d.frame)
	l.AddDot(Dot{
		float32(d.x + d.v.Num(inducedTargetX) + float64(at*d.cos)), float32(d.y + d.v.Num(inducedTargetY) + float64(at*d.sin)),
		float32(d.v.Num(inducedDiameter)), float32(d.v.Num(inducedTargetContrast)),
	})
}

// outline draws the frame as four bars.
func (d *induced) outline(at float64, l *List) {
	w, h, line := d.v.Num(inducedWidth), d.v.Num(inducedHeight), d.v.Num(inducedLine)
	x, y := d.x+float64(at*d.cos), d.y+float64(at*d.sin)
	bar := func(dx, dy, width, height float64) {
		l.AddPatch(Patch{
			XDeg: float32(x + dx), YDeg: float32(y + dy), WidthDeg: float32(width), HeightDeg: float32(height),
			Contrast: float32(d.v.Num(inducedInducerContrast)), Window: WindowRect, Mode: PatchCover,
		})
	}
	bar(0, (h-line)/2, w, line)
	bar(0, (line-h)/2, w, line)
	bar((w-line)/2, 0, line, h)
	bar((line-w)/2, 0, line, h)
}

func (d *induced) Truths(add func(name string, value float64)) {
	add("relative_speed_deg_per_s", d.v.Num(inducedTarget)-d.v.Num(inducedSurround))
}
