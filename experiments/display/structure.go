package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of structure, in the order of structureKind.Params.
const (
	structureShape = iota
	structureRotation
	structureSwing
	structureAxis
	structureDiameter
	structureHeight
	structureSlant
	structureTilt
	structureIndex
	structureCurvedness
	structureDistance
	structureSurface
	structureDots
	structureLifetime
	structureNoise
	structureDot
	structureContrast
)

const (
	shapeSphere = iota
	shapeCylinder
	shapePatch
)

const maxStructureDots = 2000

// minSwing in radians (0.006 deg): a smaller swing counts as none.
const minSwing = 1e-4

var structureKind = &Kind{
	Name: "structure",
	Doc: "Structure from motion (Wallach and O'Connell 1953, J Exp Psychol 45:205): dots on a turning sphere, cylinder or surface patch. " +
		"In parallel projection and with both surfaces shown the direction of rotation is ambiguous.",
	Params: []Param{
		structureShape:      {Key: "shape", Doc: "what carries the dots", Type: Choice, Options: []string{"sphere", "cylinder", "patch"}, Default: []float64{shapeSphere}},
		structureRotation:   {Key: "rotation_deg_per_s", Unit: "deg/s", Doc: "angular speed, at its peak when it swings; with an upright axis the front moves right for positive values", Min: -720, Max: 720, Default: []float64{90}},
		structureSwing:      {Key: "swing_deg", Unit: "deg", Doc: "the object swings sinusoidally by so much to either side; 0: it keeps turning", Min: 0, Max: 180, Default: []float64{0}},
		structureAxis:       {Key: "axis_deg", Unit: "deg", Doc: "direction of the axis in the plane of the screen, 90 is upright", Min: -360, Max: 360, Default: []float64{90}, Circular: true},
		structureDiameter:   {Key: "diameter_deg", Unit: "deg", Doc: "diameter of the object", Min: 0.1, Max: 60, Default: []float64{6}},
		structureHeight:     {Key: "height_deg", Unit: "deg", Doc: "length of a cylinder along its axis", Min: 0.1, Max: 60, Default: []float64{6}},
		structureSlant:      {Key: "slant_deg", Unit: "deg", Doc: "slant of a patch away from facing the viewer", Min: 0, Max: 80, Default: []float64{0}},
		structureTilt:       {Key: "tilt_deg", Unit: "deg", Doc: "direction in which a slanted patch comes nearer", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		structureIndex:      {Key: "shape_index", Doc: "of a curved patch: −1 cup, −0.5 rut, 0 saddle, 0.5 ridge, 1 cap (Koenderink and van Doorn 1992, Image Vis Comput 10:557)", Min: -1, Max: 1, Default: []float64{1}},
		structureCurvedness: {Key: "curvedness", Doc: "of a patch, root mean square of the principal curvatures times its radius; 0 is a plane", Min: 0, Max: 2, Default: []float64{0}},
		structureDistance:   {Key: "distance_radii", Doc: "perspective of an eye so many radii away; 0: parallel projection", Min: 0, Max: 1000, Default: []float64{0}},
		structureSurface:    {Key: "surface", Doc: "transparent: front and back dots are seen; opaque: those on the far side are hidden, which settles the direction", Type: Choice, Options: []string{"transparent", "opaque"}, Default: []float64{0}},
		structureDots:       {Key: "dots", Doc: "number of dots", Type: Integer, Min: 1, Max: maxStructureDots, Default: []float64{200}},
		structureLifetime:   {Key: "lifetime_ms", Unit: "ms", Doc: "a dot moves to a random place of the surface after so long, first ages are uniform; 0: unlimited", Min: 0, Max: 60000, Default: []float64{0}},
		structureNoise:      {Key: "noise", Doc: "share of dots that take a random place of the surface at each refresh", Min: 0, Max: 1, Default: []float64{0}},
		structureDot:        {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot", Min: 0.01, Max: 5, Default: []float64{0.1}},
		structureContrast:   {Key: "contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{1}},
	},
	Check: func(v Values, problem func(key, message string)) {
		if d := v.Num(structureDistance); d > 0 && d <= 1.2*structureReach(v) {
			problem("distance_radii", "the eye would be within the object: 0 is parallel projection, otherwise take it farther away")
		}
		if v.Choice(structureShape) == shapePatch && v.Num(structureSwing) == 0 {
			problem("swing_deg", "a patch would turn its edge to the viewer: give the angle by which it swings")
		}
	},
	Extent: func(v Values) (float64, float64) {
		size := float64(v.Num(structureDiameter) * structureReach(v))
		if d := v.Num(structureDistance); d > 0 {
			size = float64(size * (d / (d - structureReach(v))))
		}
		return size + v.Num(structureDot), size + v.Num(structureDot)
	},
	New: func(Values) Display { return &structure{} },
}

// structureReach is how far a dot can be from the middle, in radii.
func structureReach(v Values) float64 {
	switch v.Choice(structureShape) {
	case shapeCylinder:
		return exact.Hypot(1, v.Num(structureHeight)/v.Num(structureDiameter))
	case shapePatch:
		depth := exact.Tan(exact.Radians(v.Num(structureSlant))) + float64(v.Num(structureCurvedness)*exact.Sqrt2/2)
		return exact.Hypot(1, depth)
	}
	return 1
}

type structure struct {
	v            Values
	point        [maxStructureDots]vector // z towards the viewer, the axis along y
	age          [maxStructureDots]int
	n, noisy     int
	lifetime     int
	frame        int
	interval     float64
	x, y         float64
	radius       float64
	tiltX, tiltY float64 // slope of a slanted patch
	k1, k2       float64 // principal curvatures, 1/deg
	axisSin      float64
	axisCos      float64
	place, life  random.Stream
	eye          float64 // distance in degrees of the object's scale, 0: parallel
}

func (s *structure) Size() (dots, patches, batches int) { return maxStructureDots, 0, 1 }

func (s *structure) Begin(t Trial) {
	s.v, s.x, s.y, s.frame, s.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	s.place = random.NewSub(t.Seed, t.Number, random.PurposeDots, t.Place)
	s.life = random.NewSub(t.Seed, t.Number, random.PurposeLifetime, t.Place)
	s.radius = s.v.Num(structureDiameter) / 2
	s.eye = float64(s.v.Num(structureDistance) * s.radius)
	s.axisSin, s.axisCos = exact.SinCos(exact.Radians(s.v.Num(structureAxis) - 90))
	slope := exact.Tan(exact.Radians(s.v.Num(structureSlant)))
	sin, cos := exact.SinCos(exact.Radians(s.v.Num(structureTilt)))
	s.tiltX, s.tiltY = float64(slope*cos), float64(slope*sin)
	// A cap is nearest in its middle: curvature towards the viewer falls outwards.
	sin, cos = exact.SinCos(float64(exact.Pi / 2 * s.v.Num(structureIndex)))
	curvedness := s.v.Num(structureCurvedness) / s.radius
	s.k1, s.k2 = float64(-curvedness*(sin+cos)), float64(-curvedness*(sin-cos))
	s.lifetime = 0
	if ms := s.v.Num(structureLifetime); ms > 0 {
		s.lifetime = holdFrames(ms, t.IntervalMs)
	}
	s.n = int(s.v.Num(structureDots))
	s.noisy = int(exact.Round(float64(s.v.Num(structureNoise) * float64(s.n))))
	for i := range s.n {
		s.point[i], s.age[i] = s.randomPoint(), 0
		if s.lifetime > 0 {
			s.age[i] = s.life.Intn(s.lifetime)
		}
	}
}

// randomPoint is uniform over the surface, of a patch over its outline.
func (s *structure) randomPoint() vector {
	turn := float64(float64(2*exact.Pi) * s.place.Float64())
	sin, cos := exact.SinCos(turn)
	switch s.v.Choice(structureShape) {
	case shapeSphere:
		y := s.place.Range(-1, 1)
		r := float64(s.radius * math.Sqrt(1-float64(y*y)))
		return vector{float64(r * sin), float64(s.radius * y), float64(r * cos)}
	case shapeCylinder:
		return vector{float64(s.radius * sin), float64(s.place.Range(-0.5, 0.5) * s.v.Num(structureHeight)), float64(s.radius * cos)}
	}
	r := float64(s.radius * math.Sqrt(s.place.Float64()))
	x, y := float64(r*cos), float64(r*sin)
	z := float64(s.tiltX*x) + float64(s.tiltY*y) + float64(s.k1*x*x/2) + float64(s.k2*y*y/2)
	return vector{x, y, z}
}

// angle is how far the object has turned, in radians.
func (s *structure) angle() float64 {
	turned := float64(exact.Radians(s.v.Num(structureRotation)) * (float64(s.frame) * s.interval / 1000))
	if swing := exact.Radians(s.v.Num(structureSwing)); swing > minSwing {
		return float64(swing * exact.Sin(turned/swing))
	}
	return turned
}

func (s *structure) Step(n int, l *List) {
	for range n {
		s.advance()
	}
	sin, cos := exact.SinCos(s.angle())
	diameter, contrast := float32(s.v.Num(structureDot)), float32(s.v.Num(structureContrast))
	opaque := s.v.Choice(structureSurface) == 1 && s.v.Choice(structureShape) != shapePatch
	for i := range s.point[:s.n] {
		p := &s.point[i]
		x, y := float64(p.x*cos)+float64(p.z*sin), p.y
		z := float64(p.z*cos) - float64(p.x*sin)
		if opaque && s.hidden(z) {
			continue
		}
		if s.eye > 0 {
			scale := s.eye / (s.eye - z)
			x, y = float64(x*scale), float64(y*scale)
		}
		l.AddDot(Dot{
			float32(s.x + float64(x*s.axisCos) - float64(y*s.axisSin)), float32(s.y + float64(x*s.axisSin) + float64(y*s.axisCos)),
			diameter, contrast,
		})
	}
}

// hidden tells whether the surface faces away from the eye at depth z.
func (s *structure) hidden(z float64) bool {
	if s.eye == 0 {
		return z < 0
	}
	return z*s.eye < s.radius*s.radius
}

func (s *structure) advance() {
	s.frame++
	for i := range s.point[:s.n] {
		if i < s.noisy {
			s.point[i] = s.randomPoint()
			continue
		}
		if s.lifetime > 0 {
			s.age[i]++
			if s.age[i] >= s.lifetime {
				s.age[i] = 0
				s.point[i] = s.randomPoint()
			}
		}
	}
}

func (s *structure) Truths(add func(name string, value float64)) {
	add("dots", float64(s.n))
	if s.v.Choice(structureShape) == shapePatch {
		add("curvature_1_per_deg", s.k1)
		add("curvature_2_per_deg", s.k2)
	}
}
