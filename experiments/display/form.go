package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of motion_form, in the order of formKind.Params.
const (
	formFigure = iota
	formX
	formY
	formWidth
	formHeight
	formTurn
	formCarried
	formFigureDirection
	formFigureSpeed
	formGroundDirection
	formGroundSpeed
	formCoherence
	formDensity
	formFieldWidth
	formFieldHeight
	formLifetime
	formDiameter
	formContrast
)

var formKind = &Kind{
	Name: "motion_form",
	Doc: "Figure defined by motion alone: dots inside it move otherwise than those of the ground, with the same density and lifetime " +
		"(Regan 1986, Vision Res 26:1633). In any single frame there is no figure.",
	Params: []Param{
		formFigure:          {Key: "figure", Doc: "shape of the figure", Type: Choice, Options: []string{"ellipse", "rectangle"}, Default: []float64{1}},
		formX:               {Key: "figure_x_deg", Unit: "deg", Doc: "its centre at onset, to the right of the field's", Min: -50, Max: 50, Default: []float64{0}},
		formY:               {Key: "figure_y_deg", Unit: "deg", Doc: "its centre at onset, above the field's", Min: -50, Max: 50, Default: []float64{0}},
		formWidth:           {Key: "figure_width_deg", Unit: "deg", Doc: "its width", Min: 0.1, Max: 50, Default: []float64{4}},
		formHeight:          {Key: "figure_height_deg", Unit: "deg", Doc: "its height", Min: 0.1, Max: 50, Default: []float64{2}},
		formTurn:            {Key: "figure_turn_deg", Unit: "deg", Doc: "its turn, counter-clockwise", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		formCarried:         {Key: "border", Doc: "the border stands still while dots stream through, or it is carried along with the figure's dots, as when a camouflaged animal moves", Type: Choice, Options: []string{"still", "carried"}, Default: []float64{0}},
		formFigureDirection: {Key: "figure_direction_deg", Unit: "deg", Doc: "direction of the figure's dots", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		formFigureSpeed:     {Key: "figure_speed_deg_per_s", Unit: "deg/s", Doc: "their speed", Min: 0, Max: 100, Default: []float64{3}},
		formGroundDirection: {Key: "ground_direction_deg", Unit: "deg", Doc: "direction of the ground's dots", Min: -360, Max: 360, Default: []float64{180}, Circular: true},
		formGroundSpeed:     {Key: "ground_speed_deg_per_s", Unit: "deg/s", Doc: "their speed", Min: 0, Max: 100, Default: []float64{3}},
		formCoherence:       {Key: "coherence", Doc: "share of dots that move so; the others each keep a random direction at the same speed", Min: 0, Max: 1, Default: []float64{1}},
		formDensity:         {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "dots per area, in the figure and around it", Min: 0.01, Max: 100, Default: []float64{8}},
		formFieldWidth:      {Key: "width_deg", Unit: "deg", Doc: "width of the field", Min: 0.2, Max: 100, Default: []float64{10}},
		formFieldHeight:     {Key: "height_deg", Unit: "deg", Doc: "height of the field", Min: 0.2, Max: 100, Default: []float64{8}},
		formLifetime:        {Key: "lifetime_ms", Unit: "ms", Doc: "a dot moves to a random place after so long, first ages are uniform; 0: unlimited", Min: 0, Max: 60000, Default: []float64{0}},
		formDiameter:        {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot", Min: 0.01, Max: 5, Default: []float64{0.1}},
		formContrast:        {Key: "contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{1}},
	},
	Check: func(v Values, problem func(key, message string)) {
		w, h := v.Num(formFieldWidth), v.Num(formFieldHeight)
		checkCount(fieldCount(v.Num(formDensity), false, w, h), "density_per_deg2", problem)
	},
	Extent: func(v Values) (float64, float64) {
		return v.Num(formFieldWidth) + v.Num(formDiameter), v.Num(formFieldHeight) + v.Num(formDiameter)
	},
	New: func(Values) Display { return &form{} },
}

// form holds two fields over the whole area: figure dots are seen inside the
// figure only, ground dots outside only. Both are uniform at all times, and so is what is seen.
type form struct {
	v              Values
	figure, ground field
	x, y           float64
	frame          int
	interval       float64
	sin, cos       float64 // of the figure's turn
}

func (f *form) Size() (dots, patches, batches int) { return 2 * maxFieldDots, 0, 1 }

func (f *form) Begin(t Trial) {
	f.v, f.x, f.y, f.frame, f.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	w, h := f.v.Num(formFieldWidth), f.v.Num(formFieldHeight)
	n := fieldCount(f.v.Num(formDensity), false, w, h)
	f.sin, f.cos = exact.SinCos(exact.Radians(f.v.Num(formTurn)))
	f.ground.open(t, 0, n, false, w, h, f.v.Num(formLifetime))
	f.figure.open(t, 1, n, false, w, h, f.v.Num(formLifetime))
	f.aim(&f.ground, t, 0, f.v.Num(formGroundDirection), f.v.Num(formGroundSpeed))
	f.aim(&f.figure, t, 1, f.v.Num(formFigureDirection), f.v.Num(formFigureSpeed))
}

func (f *form) aim(p *field, t Trial, sub uint32, direction, speed float64) {
	s := random.NewSub(t.Seed, t.Number, random.PurposeNoise, subPlace(t, sub))
	signal := int(exact.Round(float64(f.v.Num(formCoherence) * float64(len(p.x)))))
	step := speed * t.IntervalMs / 1000
	for i := range p.x {
		own, random := direction, float64(360*s.Float64())
		if i >= signal {
			own = random
		}
		sin, cos := exact.SinCos(exact.Radians(own))
		p.vx[i], p.vy[i] = float64(step*cos), float64(step*sin)
	}
}

func (f *form) Step(n int, l *List) {
	for range n {
		f.ground.advance()
		f.figure.advance()
	}
	f.frame += n
	x, y := f.centre()
	f.show(&f.ground, x, y, false, l)
	f.show(&f.figure, x, y, true, l)
}

// centre is where the figure is now.
func (f *form) centre() (x, y float64) {
	x, y = f.v.Num(formX), f.v.Num(formY)
	if f.v.Choice(formCarried) == 1 {
		gone := float64(f.v.Num(formFigureSpeed) * (float64(f.frame) * f.interval / 1000))
		sin, cos := exact.SinCos(exact.Radians(f.v.Num(formFigureDirection)))
		x += float64(gone * cos)
		y += float64(gone * sin)
	}
	return x, y
}

func (f *form) show(p *field, x, y float64, inside bool, l *List) {
	diameter, contrast := float32(f.v.Num(formDiameter)), float32(f.v.Num(formContrast))
	for i := range p.x {
		if f.inFigure(p.x[i]-x, p.y[i]-y) == inside {
			l.AddDot(Dot{float32(f.x + p.x[i]), float32(f.y + p.y[i]), diameter, contrast})
		}
	}
}

func (f *form) inFigure(dx, dy float64) bool {
	u := 2 * (float64(dx*f.cos) + float64(dy*f.sin)) / f.v.Num(formWidth)
	v := 2 * (float64(dy*f.cos) - float64(dx*f.sin)) / f.v.Num(formHeight)
	if f.v.Choice(formFigure) == 1 {
		return math.Abs(u) <= 1 && math.Abs(v) <= 1
	}
	return float64(u*u)+float64(v*v) <= 1
}

func (f *form) Truths(add func(name string, value float64)) {
	sinF, cosF := exact.SinCos(exact.Radians(f.v.Num(formFigureDirection)))
	sinG, cosG := exact.SinCos(exact.Radians(f.v.Num(formGroundDirection)))
	x := float64(f.v.Num(formFigureSpeed)*cosF) - float64(f.v.Num(formGroundSpeed)*cosG)
	y := float64(f.v.Num(formFigureSpeed)*sinF) - float64(f.v.Num(formGroundSpeed)*sinG)
	add("relative_speed_deg_per_s", exact.Hypot(x, y))
}
