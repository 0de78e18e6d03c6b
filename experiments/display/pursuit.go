package display

import "distal/experiments/exact"

// Parameters of pursuit, in the order of pursuitKind.Params.
const (
	pursuitPath = iota
	pursuitDirection
	pursuitSpeed
	pursuitHold
	pursuitStep
	pursuitFrequency
	pursuitDiameter
	pursuitContrast
	pursuitDensity
	pursuitBackgroundDirection
	pursuitBackgroundSpeed
	pursuitOnset
	pursuitDuration
	pursuitWidth
	pursuitHeight
	pursuitDot
	pursuitDotContrast
)

const pursuitSinusoid = 1

var pursuitKind = &Kind{
	Name: "pursuit",
	Doc: "Target to follow with the eyes on a step-ramp (Rashbass 1961, J Physiol 159:326) or sinusoidal path, with a still or moving background of dots. " +
		"Gaze is instructed, not measured: the background's motion on the retina, stored with the trial, holds for perfect pursuit only.",
	Params: []Param{
		pursuitPath:                {Key: "path", Doc: "a step and then a ramp, or a sinusoid", Type: Choice, Options: []string{"step_ramp", "sinusoidal"}, Default: []float64{0}},
		pursuitDirection:           {Key: "direction_deg", Unit: "deg", Doc: "direction of the target's ramp", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		pursuitSpeed:               {Key: "speed_deg_per_s", Unit: "deg/s", Doc: "of the ramp; the peak of the sinusoid", Min: 0, Max: 60, Default: []float64{8}},
		pursuitHold:                {Key: "hold_ms", Unit: "ms", Doc: "the target stands still before it moves", Min: 0, Max: 10000, Default: []float64{500}},
		pursuitStep:                {Key: "step_deg", Unit: "deg", Doc: "step against the ramp as it begins; speed × 0.2 s brings the target back to where it was by the time pursuit begins", Min: 0, Max: 20, Default: []float64{1.6}},
		pursuitFrequency:           {Key: "frequency_hz", Unit: "Hz", Doc: "of the sinusoid", Min: 0.05, Max: 5, Default: []float64{0.4}},
		pursuitDiameter:            {Key: "target_diameter_deg", Unit: "deg", Doc: "of the target", Min: 0.02, Max: 5, Default: []float64{0.3}},
		pursuitContrast:            {Key: "target_contrast", Doc: "Weber contrast of the target", Min: -1, Max: 1, Default: []float64{1}},
		pursuitDensity:             {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "dots of the background; 0: none", Min: 0, Max: 20, Default: []float64{0.5}},
		pursuitBackgroundDirection: {Key: "background_direction_deg", Unit: "deg", Doc: "direction of the background on the screen", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		pursuitBackgroundSpeed:     {Key: "background_speed_deg_per_s", Unit: "deg/s", Doc: "its speed on the screen; negative: against background_direction_deg", Min: -60, Max: 60, Default: []float64{0}},
		pursuitOnset:               {Key: "background_onset_ms", Unit: "ms", Doc: "when the background appears, from the display's onset", Min: 0, Max: 20000, Default: []float64{0}},
		pursuitDuration:            {Key: "background_ms", Unit: "ms", Doc: "how long it is shown; 0: to the end", Min: 0, Max: 20000, Default: []float64{0}},
		pursuitWidth:               {Key: "width_deg", Unit: "deg", Doc: "width of the background", Min: 1, Max: 80, Default: []float64{20}},
		pursuitHeight:              {Key: "height_deg", Unit: "deg", Doc: "height of the background", Min: 1, Max: 80, Default: []float64{10}},
		pursuitDot:                 {Key: "dot_diameter_deg", Unit: "deg", Doc: "of a dot", Min: 0.01, Max: 5, Default: []float64{0.15}},
		pursuitDotContrast:         {Key: "dot_contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{0.5}},
	},
	Check: func(v Values, problem func(key, message string)) {
		if v.Num(pursuitDensity) > 0 {
			checkCount(fieldCount(v.Num(pursuitDensity), false, v.Num(pursuitWidth), v.Num(pursuitHeight)), "density_per_deg2", problem)
		}
	},
	Extent: func(v Values) (float64, float64) { return v.Num(pursuitWidth), v.Num(pursuitHeight) },
	New:    func(Values) Display { return &pursuit{} },
}

type pursuit struct {
	v            Values
	dots         field
	x, y         float64
	sin, cos     float64
	frame        int
	interval     float64
	hold         int
	onset, until int
}

func (p *pursuit) Size() (dots, patches, batches int) { return maxFieldDots + 1, 0, 1 }

func (p *pursuit) Begin(t Trial) {
	p.v, p.x, p.y, p.frame, p.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	p.sin, p.cos = exact.SinCos(exact.Radians(p.v.Num(pursuitDirection)))
	p.hold = int(exact.Round(p.v.Num(pursuitHold) / t.IntervalMs))
	p.onset = int(exact.Round(p.v.Num(pursuitOnset) / t.IntervalMs))
	p.until = p.onset + int(exact.Round(p.v.Num(pursuitDuration)/t.IntervalMs))
	w, h := p.v.Num(pursuitWidth), p.v.Num(pursuitHeight)
	p.dots.open(t, 0, fieldCount(p.v.Num(pursuitDensity), false, w, h), false, w, h, 0)
	step := p.v.Num(pursuitBackgroundSpeed) * t.IntervalMs / 1000
	sin, cos := exact.SinCos(exact.Radians(p.v.Num(pursuitBackgroundDirection)))
	p.dots.drive(float64(step*cos), float64(step*sin))
}

// target is how far the target is along its direction.
func (p *pursuit) target() float64 {
	if p.frame < p.hold {
		return 0
	}
	seconds := float64(p.frame-p.hold) * p.interval / 1000
	if p.v.Choice(pursuitPath) == pursuitSinusoid {
		omega := float64(2 * exact.Pi * p.v.Num(pursuitFrequency))
		return float64(p.v.Num(pursuitSpeed) / omega * exact.Sin(float64(omega*seconds)))
	}
	return float64(p.v.Num(pursuitSpeed)*seconds) - p.v.Num(pursuitStep)
}

func (p *pursuit) Step(n int, l *List) {
	for range n {
		p.dots.advance()
	}
	p.frame += n
	if p.frame >= p.onset && (p.until == p.onset || p.frame < p.until) {
		diameter, contrast := float32(p.v.Num(pursuitDot)), float32(p.v.Num(pursuitDotContrast))
		for i := range p.dots.x {
			l.AddDot(Dot{float32(p.x + p.dots.x[i]), float32(p.y + p.dots.y[i]), diameter, contrast})
		}
	}
	at := p.target()
	l.AddDot(Dot{
		float32(p.x + float64(at*p.cos)), float32(p.y + float64(at*p.sin)),
		float32(p.v.Num(pursuitDiameter)), float32(p.v.Num(pursuitContrast)),
	})
}

func (p *pursuit) Truths(add func(name string, value float64)) {
	sin, cos := exact.SinCos(exact.Radians(p.v.Num(pursuitBackgroundDirection)))
	background := p.v.Num(pursuitBackgroundSpeed)
	x := float64(background*cos) - float64(p.v.Num(pursuitSpeed)*p.cos)
	y := float64(background*sin) - float64(p.v.Num(pursuitSpeed)*p.sin)
	add("background_on_retina_deg_per_s", exact.Hypot(x, y))
	add("background_on_retina_direction_deg", exact.Degrees(exact.Atan2(y, x)))
}
