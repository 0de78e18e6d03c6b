package display

import (
	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of fields, in the order of fieldsKind.Params.
const (
	fieldsDirection = iota
	fieldsDirections
	fieldsSpeeds
	fieldsSpeedSD
	fieldsDirectionSD
	fieldsCoherence
	fieldsDensities
	fieldsContrasts
	fieldsAperture
	fieldsWidth
	fieldsHeight
	fieldsLifetime
	fieldsDiameter
)

const maxFields = 4

var fieldsKind = &Kind{
	Name: "fields",
	Doc: "One to four superimposed fields of dots, each with its own direction and speed: transparent motion " +
		"(Snowden, Treue, Erickson and Andersen 1991, J Neurosci 11:2768), opposing motion, and distributions of direction and speed. Later fields lie before earlier ones.",
	Params: []Param{
		fieldsDirection:   {Key: "direction_deg", Unit: "deg", Doc: "turn of all directions, counter-clockwise", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		fieldsDirections:  {Key: "field_directions_deg", Unit: "deg", Doc: "direction of each field about direction_deg; there are as many fields", Min: -360, Max: 360, Default: []float64{0, 180}, MaxCount: maxFields},
		fieldsSpeeds:      {Key: "speeds_deg_per_s", Unit: "deg/s", Doc: "of each field; the last value holds for the rest", Min: 0, Max: 200, Default: []float64{4}, MaxCount: maxFields},
		fieldsSpeedSD:     {Key: "speed_sd_octaves", Unit: "octaves", Doc: "standard deviation of the dots' own speeds about their field's, on a scale of base-2 logarithms, kept for the trial", Min: 0, Max: 4, Default: []float64{0}},
		fieldsDirectionSD: {Key: "direction_sd_deg", Unit: "deg", Doc: "standard deviation of the dots' own directions about their field's, kept for the trial (Williams and Sekuler 1984, Vision Res 24:55)", Min: 0, Max: 180, Default: []float64{0}},
		fieldsCoherence:   {Key: "coherence", Doc: "share of dots that move so; the others each keep a random direction at their own speed", Min: 0, Max: 1, Default: []float64{1}},
		fieldsDensities:   {Key: "densities_per_deg2", Unit: "dots/deg²", Doc: "of each field; the last value holds for the rest", Min: 0.01, Max: 100, Default: []float64{1}, MaxCount: maxFields},
		fieldsContrasts:   {Key: "contrasts", Doc: "Weber contrast of each field's dots; the last value holds for the rest", Min: -1, Max: 1, Default: []float64{1}, MaxCount: maxFields},
		fieldsAperture:    {Key: "aperture", Doc: "shape of the field", Type: Choice, Options: []string{"circle", "rectangle"}, Default: []float64{0}},
		fieldsWidth:       {Key: "width_deg", Unit: "deg", Doc: "diameter of the circle, width of the rectangle", Min: 0.1, Max: 100, Default: []float64{8}},
		fieldsHeight:      {Key: "height_deg", Unit: "deg", Doc: "height of the rectangle", Min: 0.1, Max: 100, Default: []float64{8}},
		fieldsLifetime:    {Key: "lifetime_ms", Unit: "ms", Doc: "a dot moves to a random place after so long, first ages are uniform; 0: unlimited", Min: 0, Max: 60000, Default: []float64{0}},
		fieldsDiameter:    {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot", Min: 0.01, Max: 5, Default: []float64{0.15}},
	},
	Check: func(v Values, problem func(key, message string)) {
		for i := range v[fieldsDirections] {
			checkCount(fieldsCount(v, i), "densities_per_deg2", problem)
		}
	},
	Extent: func(v Values) (float64, float64) {
		w, h := fieldsSize(v)
		return w + v.Num(fieldsDiameter), h + v.Num(fieldsDiameter)
	},
	New: func(Values) Display { return &fields{} },
}

func fieldsSize(v Values) (width, height float64) {
	if v.Choice(fieldsAperture) == 0 {
		return v.Num(fieldsWidth), v.Num(fieldsWidth)
	}
	return v.Num(fieldsWidth), v.Num(fieldsHeight)
}

func fieldsCount(v Values, i int) int {
	w, h := fieldsSize(v)
	return fieldCount(at(v[fieldsDensities], i), v.Choice(fieldsAperture) == 0, w, h)
}

type fields struct {
	v    Values
	part [maxFields]field
	n    int
	x, y float64
}

func (f *fields) Size() (dots, patches, batches int) { return maxFields * maxFieldDots, 0, 1 }

func (f *fields) Begin(t Trial) {
	f.v, f.x, f.y = t.Values, t.XDeg, t.YDeg
	f.n = len(f.v[fieldsDirections])
	width, height := fieldsSize(f.v)
	for i := range f.part[:f.n] {
		p := &f.part[i]
		p.open(t, uint32(i), fieldsCount(f.v, i), f.v.Choice(fieldsAperture) == 0, width, height, f.v.Num(fieldsLifetime))
		f.aim(p, i, t)
	}
}

// aim gives the dots of field i their velocities. Each dot draws the same
// numbers whatever the spreads are, so that changing one does not shift another.
func (f *fields) aim(p *field, i int, t Trial) {
	s := random.NewSub(t.Seed, t.Number, random.PurposeNoise, subPlace(t, uint32(i)))
	signal := int(exact.Round(float64(f.v.Num(fieldsCoherence) * float64(len(p.x)))))
	step := at(f.v[fieldsSpeeds], i) * t.IntervalMs / 1000
	for j := range p.x {
		direction := f.v.Num(fieldsDirection) + f.v[fieldsDirections][i] + float64(f.v.Num(fieldsDirectionSD)*s.Normal())
		random := float64(360 * s.Float64())
		if j >= signal {
			direction = random
		}
		own := float64(step * exact.Exp(float64(float64(exact.Ln2*f.v.Num(fieldsSpeedSD))*s.Normal())))
		sin, cos := exact.SinCos(exact.Radians(direction))
		p.vx[j], p.vy[j] = float64(own*cos), float64(own*sin)
	}
}

func (f *fields) Step(n int, l *List) {
	diameter := float32(f.v.Num(fieldsDiameter))
	for i := range f.part[:f.n] {
		p := &f.part[i]
		for range n {
			p.advance()
		}
		contrast := float32(at(f.v[fieldsContrasts], i))
		for j := range p.x {
			l.AddDot(Dot{float32(f.x + p.x[j]), float32(f.y + p.y[j]), diameter, contrast})
		}
	}
}

func (f *fields) Truths(add func(name string, value float64)) {
	n := 0
	for i := range f.n {
		n += len(f.part[i].x)
	}
	add("dots", float64(n))
}
