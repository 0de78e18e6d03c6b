package display

import "distal/experiments/exact"

// Parameters of gaze_shift, in the order of gazeKind.Params.
const (
	gazeAmplitude = iota
	gazeDirection
	gazeCue
	gazeDelay
	gazeDisplacement
	gazeDisplacementDirection
	gazeWhat
	gazeBlank
	gazeMark
	gazeMarkContrast
	gazeDensity
	gazeWidth
	gazeHeight
	gazeDot
	gazeDotContrast
)

const displacedTarget = 1

var gazeKind = &Kind{
	Name: "gaze_shift",
	Doc: "Gaze shift between two marks on a cue, with a displacement at a chosen delay (Bridgeman, Hendry and Stark 1975, Vision Res 15:719): " +
		"saccadic suppression of displacement. Gaze is instructed, not measured; saccades to a cue start after about 200 ms.",
	Params: []Param{
		gazeAmplitude:             {Key: "amplitude_deg", Unit: "deg", Doc: "distance of the two marks", Min: 0.5, Max: 40, Default: []float64{8}},
		gazeDirection:             {Key: "direction_deg", Unit: "deg", Doc: "from the first mark to the second", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		gazeCue:                   {Key: "cue_ms", Unit: "ms", Doc: "when the first mark goes and the second appears", Min: 0, Max: 20000, Default: []float64{800}},
		gazeDelay:                 {Key: "delay_ms", Unit: "ms", Doc: "from the cue to the displacement", Min: 0, Max: 5000, Default: []float64{200}},
		gazeDisplacement:          {Key: "displacement_deg", Unit: "deg", Doc: "how far it goes; negative: the other way", Min: -10, Max: 10, Default: []float64{1}},
		gazeDisplacementDirection: {Key: "displacement_direction_deg", Unit: "deg", Doc: "in which direction", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		gazeWhat:                  {Key: "displaced", Doc: "the background, or the second mark", Type: Choice, Options: []string{"background", "target"}, Default: []float64{0}},
		gazeBlank:                 {Key: "blank_ms", Unit: "ms", Doc: "what is displaced vanishes for so long before it appears in its new place, which restores sensitivity (Deubel, Schneider and Bridgeman 1996, Vision Res 36:985)", Min: 0, Max: 2000, Default: []float64{0}},
		gazeMark:                  {Key: "mark_diameter_deg", Unit: "deg", Doc: "of the marks", Min: 0.05, Max: 5, Default: []float64{0.4}},
		gazeMarkContrast:          {Key: "mark_contrast", Doc: "Weber contrast of the marks", Min: -1, Max: 1, Default: []float64{1}},
		gazeDensity:               {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "dots of the background; 0: none", Min: 0, Max: 20, Default: []float64{0.5}},
		gazeWidth:                 {Key: "width_deg", Unit: "deg", Doc: "width of the background", Min: 1, Max: 80, Default: []float64{20}},
		gazeHeight:                {Key: "height_deg", Unit: "deg", Doc: "height of the background", Min: 1, Max: 80, Default: []float64{10}},
		gazeDot:                   {Key: "dot_diameter_deg", Unit: "deg", Doc: "of a dot", Min: 0.01, Max: 5, Default: []float64{0.15}},
		gazeDotContrast:           {Key: "dot_contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{0.5}},
	},
	Check: func(v Values, problem func(key, message string)) {
		if v.Num(gazeDensity) > 0 {
			checkCount(fieldCount(v.Num(gazeDensity), false, v.Num(gazeWidth), v.Num(gazeHeight)), "density_per_deg2", problem)
		} else if v.Choice(gazeWhat) != displacedTarget {
			problem("displaced", "there is no background to displace: give density_per_deg2, or displace the target")
		}
	},
	Extent: func(v Values) (float64, float64) {
		shift := float64(2 * max(v.Num(gazeDisplacement), -v.Num(gazeDisplacement)))
		reach := v.Num(gazeAmplitude) + v.Num(gazeMark) + shift
		return max(v.Num(gazeWidth)+shift, reach), max(v.Num(gazeHeight)+shift, reach)
	},
	New: func(Values) Display { return &gaze{} },
}

type gaze struct {
	v             Values
	dots          field
	x, y          float64
	sin, cos      float64
	shiftX        float64
	shiftY        float64
	frame         int
	interval      float64
	cue, off, new int // refresh intervals: cue, vanishing, reappearance
}

func (g *gaze) Size() (dots, patches, batches int) { return maxFieldDots + 1, 0, 1 }

func (g *gaze) Begin(t Trial) {
	g.v, g.x, g.y, g.frame, g.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	g.sin, g.cos = exact.SinCos(exact.Radians(g.v.Num(gazeDirection)))
	sin, cos := exact.SinCos(exact.Radians(g.v.Num(gazeDisplacementDirection)))
	g.shiftX, g.shiftY = float64(g.v.Num(gazeDisplacement)*cos), float64(g.v.Num(gazeDisplacement)*sin)
	g.cue = int(exact.Round(g.v.Num(gazeCue) / t.IntervalMs))
	g.off = g.cue + int(exact.Round(g.v.Num(gazeDelay)/t.IntervalMs))
	g.new = g.off + int(exact.Round(g.v.Num(gazeBlank)/t.IntervalMs))
	w, h := g.v.Num(gazeWidth), g.v.Num(gazeHeight)
	g.dots.open(t, 0, fieldCount(g.v.Num(gazeDensity), false, w, h), false, w, h, 0)
}

func (g *gaze) Step(n int, l *List) {
	g.frame += n
	target := g.v.Choice(gazeWhat) == displacedTarget
	blank := g.frame >= g.off && g.frame < g.new
	shiftX, shiftY := 0.0, 0.0
	if g.frame >= g.new {
		shiftX, shiftY = g.shiftX, g.shiftY
	}
	if target || !blank {
		g.background(target, shiftX, shiftY, l)
	}
	along := -g.v.Num(gazeAmplitude) / 2
	if g.frame >= g.cue {
		along = -along
	}
	if !target {
		shiftX, shiftY = 0, 0
	} else if blank {
		return
	}
	l.AddDot(Dot{
		float32(g.x + shiftX + float64(along*g.cos)), float32(g.y + shiftY + float64(along*g.sin)),
		float32(g.v.Num(gazeMark)), float32(g.v.Num(gazeMarkContrast)),
	})
}

func (g *gaze) background(still bool, shiftX, shiftY float64, l *List) {
	if still {
		shiftX, shiftY = 0, 0
	}
	diameter, contrast := float32(g.v.Num(gazeDot)), float32(g.v.Num(gazeDotContrast))
	for i := range g.dots.x {
		l.AddDot(Dot{float32(g.x + g.dots.x[i] + shiftX), float32(g.y + g.dots.y[i] + shiftY), diameter, contrast})
	}
}

func (g *gaze) Truths(add func(name string, value float64)) {
	add("cue_ms", float64(float64(g.cue)*g.interval))
	add("displacement_onset_ms", float64(float64(g.new)*g.interval))
}
