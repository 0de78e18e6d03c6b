package display

import (
	"math"

	"distal/experiments/exact"
)

// Parameters of opening, in the order of openingKind.Params.
const (
	openingContour = iota
	openingOrientation
	openingDirection
	openingSpeed
	openingStart
	openingLength
	openingThickness
	openingFrequency
	openingContrast
	openingShape
	openingWidth
	openingHeight
	openingTurn
	openingEdge
	openingSurround
)

const (
	contourLine = iota
	contourEdge
	contourGrating
)

var openingKind = &Kind{
	Name: "opening",
	Doc: "Straight contour moving behind an opening (Wallach 1935, Psychol Forsch 20:325; Adelson and Movshon 1982, Nature 300:523). " +
		"Its true velocity and the part at right angles to the contour, which is all that can be seen where its ends are hidden, are stored with the trial.",
	Params: []Param{
		openingContour:     {Key: "contour", Doc: "a line or bar, the edge of a half plane, or a grating", Type: Choice, Options: []string{"line", "edge", "grating"}, Default: []float64{contourLine}},
		openingOrientation: {Key: "orientation_deg", Unit: "deg", Doc: "orientation of the contour, counter-clockwise from horizontal", Min: -360, Max: 360, Default: []float64{90}, Circular: true},
		openingDirection:   {Key: "direction_deg", Unit: "deg", Doc: "true direction of motion", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		openingSpeed:       {Key: "speed_deg_per_s", Unit: "deg/s", Doc: "true speed", Min: 0, Max: 100, Default: []float64{4}},
		openingStart:       {Key: "start_deg", Unit: "deg", Doc: "place of the contour's middle at onset along the true direction", Min: -50, Max: 50, Default: []float64{-1}},
		openingLength:      {Key: "line_length_deg", Unit: "deg", Doc: "length of the line; 0: its ends are always hidden", Min: 0, Max: 60, Default: []float64{0}},
		openingThickness:   {Key: "line_width_deg", Unit: "deg", Doc: "width of the line", Min: 0.01, Max: 30, Default: []float64{0.2}},
		openingFrequency:   {Key: "spatial_frequency_cpd", Unit: "c/deg", Doc: "of the grating", Min: 0.02, Max: 30, Default: []float64{1}},
		openingContrast:    {Key: "contrast", Doc: "Weber contrast of line or edge, Michelson contrast of the grating", Min: -1, Max: 1, Default: []float64{0.8}},
		openingShape:       {Key: "opening", Doc: "shape of the opening", Type: Choice, Options: []string{"ellipse", "rectangle"}, Default: []float64{0}},
		openingWidth:       {Key: "opening_width_deg", Unit: "deg", Doc: "its width", Min: 0.1, Max: 60, Default: []float64{5}},
		openingHeight:      {Key: "opening_height_deg", Unit: "deg", Doc: "its height: a long opening shows motion along itself", Min: 0.1, Max: 60, Default: []float64{5}},
		openingTurn:        {Key: "opening_turn_deg", Unit: "deg", Doc: "its turn, counter-clockwise", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		openingEdge:        {Key: "edge_deg", Unit: "deg", Doc: "width of the opening's raised-cosine edge, inside; 0: hard", Min: 0, Max: 30, Default: []float64{0}},
		openingSurround:    {Key: "surround_contrast", Doc: "Weber contrast of everything around the opening; 0: the opening is invisible", Min: -1, Max: 1, Default: []float64{-0.3}},
	},
	Check: func(v Values, problem func(key, message string)) {
		checkEdge(v.Num(openingEdge), v.Num(openingWidth), v.Num(openingHeight), problem)
	},
	Extent: func(v Values) (float64, float64) {
		return windowExtent(int(v.Num(openingShape)), v.Num(openingWidth), v.Num(openingHeight))
	},
	New: func(Values) Display { return &opening{} },
}

type opening struct {
	v              Values
	x, y           float64
	frame          int
	interval       float64
	dirSin, dirCos float64
	normalDeg      float64 // at right angles to the contour, on the side of the motion
	normalSpeed    float64
}

func (o *opening) Size() (dots, patches, batches int) { return 0, 2, 1 }

func (o *opening) Begin(t Trial) {
	o.v, o.x, o.y, o.frame, o.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	o.dirSin, o.dirCos = exact.SinCos(exact.Radians(o.v.Num(openingDirection)))
	o.normalDeg = o.v.Num(openingOrientation) - 90
	o.normalSpeed = float64(o.v.Num(openingSpeed) * o.onNormal())
	if o.normalSpeed < 0 {
		o.normalDeg, o.normalSpeed = o.normalDeg+180, -o.normalSpeed
	}
}

// onNormal is the cosine between the true direction and the contour's normal.
func (o *opening) onNormal() float64 {
	sin, cos := exact.SinCos(exact.Radians(o.normalDeg))
	return float64(sin*o.dirSin) + float64(cos*o.dirCos)
}

func (o *opening) Step(n int, l *List) {
	o.frame += n
	gone := o.v.Num(openingStart) + float64(o.v.Num(openingSpeed)*(float64(o.frame)*o.interval/1000))
	l.AddPatch(o.contour(gone))
	window := float32(WindowSurround + o.v.Choice(openingShape))
	l.AddPatch(Patch{
		XDeg: float32(o.x), YDeg: float32(o.y), OrientationDeg: float32(o.v.Num(openingTurn)),
		WidthDeg: float32(o.v.Num(openingWidth)), HeightDeg: float32(o.v.Num(openingHeight)),
		Contrast: float32(o.v.Num(openingSurround)), RampDeg: float32(o.v.Num(openingEdge)), Window: window, Mode: PatchCover,
	})
}

// contour is the moving part after it has gone so far along the true direction.
func (o *opening) contour(gone float64) Patch {
	size := float64(2 * exact.Hypot(o.v.Num(openingWidth), o.v.Num(openingHeight)))
	p := Patch{
		XDeg: float32(o.x + float64(gone*o.dirCos)), YDeg: float32(o.y + float64(gone*o.dirSin)),
		WidthDeg: float32(size), HeightDeg: float32(size),
		OrientationDeg: float32(o.normalDeg), Contrast: float32(o.v.Num(openingContrast)), Window: WindowRect, Mode: PatchCover,
	}
	switch o.v.Choice(openingContour) {
	case contourLine:
		p.WidthDeg = float32(o.v.Num(openingThickness))
		if length := o.v.Num(openingLength); length > 0 {
			p.HeightDeg = float32(max(length, 0.01))
		} else {
			// Long enough to hide its ends wherever its middle is.
			p.HeightDeg = float32(size + float64(2*max(gone, -gone)))
		}
	case contourEdge:
		// The half plane behind the edge: what is seen is its leading side.
		sin, cos := exact.SinCos(exact.Radians(o.normalDeg))
		depth := size + float64(2*max(gone, -gone))
		p.XDeg -= float32(depth / 2 * cos)
		p.YDeg -= float32(depth / 2 * sin)
		p.WidthDeg, p.HeightDeg = float32(depth), float32(2*depth)
	default:
		p.XDeg, p.YDeg = float32(o.x), float32(o.y)
		p.SpatialFrequencyCPD = float32(o.v.Num(openingFrequency))
		p.PhaseRad = radiansOfTurns(float64(-o.v.Num(openingFrequency) * gone * o.onNormal()))
		p.Carrier, p.Mode = CarrierSine, PatchAdd
		if p.Contrast < 0 {
			p.Contrast = -p.Contrast
		}
	}
	return p
}

func (o *opening) Truths(add func(name string, value float64)) {
	add("true_direction_deg", o.v.Num(openingDirection))
	add("true_speed_deg_per_s", o.v.Num(openingSpeed))
	add("normal_direction_deg", o.normalDeg-float64(360*math.Floor((o.normalDeg+180)/360)))
	add("normal_speed_deg_per_s", o.normalSpeed)
}
