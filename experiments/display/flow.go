package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of flow, in the order of flowKind.Params.
const (
	flowScene = iota
	flowHeadingX
	flowHeadingY
	flowSpeed
	flowSense
	flowYaw
	flowPitch
	flowRoll
	flowPath
	flowDots
	flowNear
	flowFar
	flowWidth
	flowHeight
	flowLifetime
	flowNoise
	flowDiameter
	flowContrast
	flowObjectDots
	flowObjectX
	flowObjectY
	flowObjectDistance
	flowObjectSize
	flowObjectVX
	flowObjectVY
	flowObjectVZ
)

const (
	sceneCloud = iota
	sceneGround
	sceneTunnel
	scenePlane
)

const (
	maxFlowDots   = 2000
	maxObjectDots = 200
)

var flowKind = &Kind{
	Name: "flow",
	Doc: "Optic flow of a rigid scene of dots for an observer who translates and rotates (Longuet-Higgins and Prazdny 1980, Proc R Soc Lond B 208:385). " +
		"Lengths are in eye heights above the ground, tunnel radii, or any unit in the other scenes. Dots that leave the field come back at a random place of the field.",
	Params: []Param{
		flowScene:          {Key: "scene", Doc: "dots in a cloud, on a ground plane, on a tunnel's wall, or on a plane facing the observer at far", Type: Choice, Options: []string{"cloud", "ground", "tunnel", "plane"}, Default: []float64{sceneCloud}},
		flowHeadingX:       {Key: "heading_x_deg", Unit: "deg", Doc: "heading to the right of the field's centre", Min: -180, Max: 180, Default: []float64{0}},
		flowHeadingY:       {Key: "heading_y_deg", Unit: "deg", Doc: "heading above the field's centre", Min: -90, Max: 90, Default: []float64{0}},
		flowSpeed:          {Key: "speed_per_s", Unit: "1/s", Doc: "lengths travelled per second", Min: 0, Max: 50, Default: []float64{1.5}},
		flowSense:          {Key: "sense", Doc: "forwards along the heading, or backwards away from it", Type: Choice, Options: []string{"expansion", "contraction"}, Default: []float64{0}},
		flowYaw:            {Key: "yaw_deg_per_s", Unit: "deg/s", Doc: "rotation of gaze to the right", Min: -90, Max: 90, Default: []float64{0}},
		flowPitch:          {Key: "pitch_deg_per_s", Unit: "deg/s", Doc: "rotation of gaze upwards", Min: -90, Max: 90, Default: []float64{0}},
		flowRoll:           {Key: "roll_deg_per_s", Unit: "deg/s", Doc: "counter-clockwise rotation about the line of sight", Min: -360, Max: 360, Default: []float64{0}},
		flowPath:           {Key: "path", Doc: "straight: the heading stays in the scene while gaze rotates, as in pursuit; curved: it stays in the field", Type: Choice, Options: []string{"straight", "curved"}, Default: []float64{0}},
		flowDots:           {Key: "dots", Doc: "number of dots", Type: Integer, Min: 1, Max: maxFlowDots, Default: []float64{300}},
		flowNear:           {Key: "near", Doc: "nearest distance of a dot along the line of sight", Min: 0.1, Max: 100, Default: []float64{2}},
		flowFar:            {Key: "far", Doc: "farthest distance of a dot along the line of sight", Min: 0.2, Max: 1000, Default: []float64{20}},
		flowWidth:          {Key: "width_deg", Unit: "deg", Doc: "width of the field", Min: 1, Max: 120, Default: []float64{30}},
		flowHeight:         {Key: "height_deg", Unit: "deg", Doc: "height of the field", Min: 1, Max: 120, Default: []float64{22}},
		flowLifetime:       {Key: "lifetime_ms", Unit: "ms", Doc: "a dot moves to a random place after so long, first ages are uniform; 0: unlimited", Min: 0, Max: 60000, Default: []float64{0}},
		flowNoise:          {Key: "noise", Doc: "share of dots that move with their own flow's speed in a random direction, kept for life", Min: 0, Max: 1, Default: []float64{0}},
		flowDiameter:       {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot, the same at every distance", Min: 0.01, Max: 5, Default: []float64{0.2}},
		flowContrast:       {Key: "contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{1}},
		flowObjectDots:     {Key: "object_dots", Doc: "dots of an opaque disc that moves in the scene by itself; 0: none", Type: Integer, Min: 0, Max: maxObjectDots, Default: []float64{0}},
		flowObjectX:        {Key: "object_x_deg", Unit: "deg", Doc: "its place at onset to the right of the centre", Min: -60, Max: 60, Default: []float64{0}},
		flowObjectY:        {Key: "object_y_deg", Unit: "deg", Doc: "its place at onset above the centre", Min: -60, Max: 60, Default: []float64{0}},
		flowObjectDistance: {Key: "object_distance", Doc: "its distance at onset along the line of sight", Min: 0.1, Max: 100, Default: []float64{5}},
		flowObjectSize:     {Key: "object_diameter_deg", Unit: "deg", Doc: "its diameter at onset", Min: 0.1, Max: 60, Default: []float64{4}},
		flowObjectVX:       {Key: "object_right_per_s", Unit: "1/s", Doc: "its velocity in the scene, to the right", Min: -50, Max: 50, Default: []float64{0}},
		flowObjectVY:       {Key: "object_up_per_s", Unit: "1/s", Doc: "its velocity in the scene, upwards", Min: -50, Max: 50, Default: []float64{0}},
		flowObjectVZ:       {Key: "object_away_per_s", Unit: "1/s", Doc: "its velocity in the scene, away from the observer", Min: -50, Max: 50, Default: []float64{0}},
	},
	Check: checkFlow,
	Extent: func(v Values) (float64, float64) {
		return v.Num(flowWidth) + v.Num(flowDiameter), v.Num(flowHeight) + v.Num(flowDiameter)
	},
	New: func(Values) Display { return &flow{} },
}

func checkFlow(v Values, problem func(key, message string)) {
	if v.Num(flowFar) <= v.Num(flowNear) {
		problem("far", "must be above near")
	}
	if v.Choice(flowScene) == sceneGround && v.Num(flowFar)*exact.Tan(exact.Radians(v.Num(flowHeight)/2)) < 1.1 {
		problem("far", "the ground up to far lies below the field: raise far or height_deg")
	}
}

// vector is in the observer's view: x to the right, y up, z along the line of sight.
type vector struct{ x, y, z float64 }

func (a vector) plus(b vector, times float64) vector {
	return vector{a.x + float64(times*b.x), a.y + float64(times*b.y), a.z + float64(times*b.z)}
}

func (a vector) dot(b vector) float64 { return float64(a.x*b.x) + float64(a.y*b.y) + float64(a.z*b.z) }

func (a vector) cross(b vector) vector {
	return vector{
		float64(a.y*b.z) - float64(a.z*b.y), float64(a.z*b.x) - float64(a.x*b.z), float64(a.x*b.y) - float64(a.y*b.x),
	}
}

// turning is a rotation matrix.
type turning [3]vector

func (r *turning) apply(a vector) vector { return vector{r[0].dot(a), r[1].dot(a), r[2].dot(a)} }

// turn is the rotation by the vector w: about its direction by its length in
// radians (Rodrigues' formula).
func turn(w vector) turning {
	angle := math.Sqrt(w.dot(w))
	if angle == 0 {
		return turning{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}
	}
	axis := vector{w.x / angle, w.y / angle, w.z / angle}
	sin, cos := exact.SinCos(angle)
	var r turning
	for i, unit := range [3]vector{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}} {
		column := vector{float64(cos * unit.x), float64(cos * unit.y), float64(cos * unit.z)}.plus(axis.cross(unit), sin).plus(axis, float64((1-cos)*axis.dot(unit)))
		switch i {
		case 0:
			r[0].x, r[1].x, r[2].x = column.x, column.y, column.z
		case 1:
			r[0].y, r[1].y, r[2].y = column.x, column.y, column.z
		default:
			r[0].z, r[1].z, r[2].z = column.x, column.y, column.z
		}
	}
	return r
}

// FlowVelocity is the velocity (u, v) in the image plane of unit focal length of
// a point seen at (x, y) = (X/Z, Y/Z) and depth Z by an observer with
// translation (U, V, W) and rotation (A, B, C) (Longuet-Higgins and Prazdny 1980,
// Proc R Soc Lond B 208:385).
func FlowVelocity(x, y, depth float64, translation, rotation [3]float64) (u, v float64) {
	a, b, c := rotation[0], rotation[1], rotation[2]
	u = (float64(x*translation[2])-translation[0])/depth + float64(a*x*y) - float64(b*(1+float64(x*x))) + float64(c*y)
	v = (float64(y*translation[2])-translation[1])/depth + float64(a*(1+float64(y*y))) - float64(b*x*y) - float64(c*x)
	return u, v
}

type flowDot struct {
	vector
	sin, cos float64 // of the turn of a noise dot's path
	age      int
	noise    bool
}

type flow struct {
	v                Values
	centreX, centreY float64
	dots             [maxFlowDots]flowDot
	n                int
	object           [maxObjectDots]vector // about its centre
	objects          int
	middle, drift    vector // of the object
	radius           float64

	move     vector // translation in a refresh interval
	rotation turning
	// The surface: plane normal·P = offset, or the tunnel of radius 1 with a point
	// (origin) and direction (normal) of its axis.
	normal, origin vector
	offset         float64
	tanX, tanY     float64 // half the field
	near, far      float64
	lifetime       int

	place, life, aim random.Stream
}

func (f *flow) Size() (dots, patches, batches int) { return maxFlowDots + maxObjectDots, 0, 1 }

func (f *flow) Begin(t Trial) {
	f.v, f.centreX, f.centreY = t.Values, t.XDeg, t.YDeg
	f.place = random.NewSub(t.Seed, t.Number, random.PurposeDots, t.Place)
	f.life = random.NewSub(t.Seed, t.Number, random.PurposeLifetime, t.Place)
	f.aim = random.NewSub(t.Seed, t.Number, random.PurposeNoise, t.Place)
	f.tanX = exact.Tan(exact.Radians(f.v.Num(flowWidth) / 2))
	f.tanY = exact.Tan(exact.Radians(f.v.Num(flowHeight) / 2))
	f.observe(t.IntervalMs / 1000)
	f.build()
	f.lifetime = 0
	if ms := f.v.Num(flowLifetime); ms > 0 {
		f.lifetime = holdFrames(ms, t.IntervalMs)
	}
	f.n = int(f.v.Num(flowDots))
	noisy := int(exact.Round(float64(f.v.Num(flowNoise) * float64(f.n))))
	for i := range f.dots[:f.n] {
		d := &f.dots[i]
		d.noise, d.age = i < noisy, 0
		if f.lifetime > 0 {
			d.age = f.life.Intn(f.lifetime)
		}
		f.renew(d)
	}
	f.buildObject(t)
}

// observe sets what happens in one refresh interval.
func (f *flow) observe(seconds float64) {
	speed := f.v.Num(flowSpeed)
	if f.v.Choice(flowSense) == 1 {
		speed = -speed
	}
	sinX, cosX := exact.SinCos(exact.Radians(f.v.Num(flowHeadingX)))
	sinY, cosY := exact.SinCos(exact.Radians(f.v.Num(flowHeadingY)))
	step := float64(speed * seconds)
	f.move = vector{float64(step * sinX * cosY), float64(step * sinY), float64(step * cosX * cosY)}
	// The scene turns against gaze: to the left, downwards, clockwise.
	f.rotation = turn(vector{
		float64(exact.Radians(f.v.Num(flowPitch)) * seconds), float64(-exact.Radians(f.v.Num(flowYaw)) * seconds), float64(-exact.Radians(f.v.Num(flowRoll)) * seconds),
	})
}

// build puts the scene before the observer.
func (f *flow) build() {
	f.near, f.far = f.v.Num(flowNear), f.v.Num(flowFar)
	f.origin = vector{}
	f.normal, f.offset = vector{0, 0, 1}, f.far
	switch f.v.Choice(flowScene) {
	case sceneGround:
		f.normal, f.offset = vector{0, -1, 0}, 1
	case scenePlane:
		f.near, f.far = float64(0.01*f.near), 1e6
	}
}

// renew puts a dot at a random place of the field. The scene's surface may have
// turned out of the field: then the dot goes where it is not drawn.
func (f *flow) renew(d *flowDot) {
	d.sin, d.cos = 0, 1
	if d.noise {
		d.sin, d.cos = exact.SinCos(float64(float64(2*exact.Pi) * f.aim.Float64()))
	}
	for range 128 {
		x, y := f.place.Range(-f.tanX, f.tanX), f.place.Range(-f.tanY, f.tanY)
		depth := f.depth(x, y)
		if depth >= f.near && depth <= f.far {
			d.vector = vector{float64(depth * x), float64(depth * y), depth}
			return
		}
	}
	d.vector = vector{0, 0, -1}
}

// depth is how far along the line of sight the scene lies at image place (x, y).
func (f *flow) depth(x, y float64) float64 {
	ray := vector{x, y, 1}
	switch f.v.Choice(flowScene) {
	case sceneCloud:
		return f.place.Range(f.near, f.far)
	case sceneTunnel:
		// |depth·ray − origin| = 1, both taken at right angles to the axis.
		r := ray.plus(f.normal, -ray.dot(f.normal))
		o := f.origin.plus(f.normal, -f.origin.dot(f.normal))
		a, b, c := r.dot(r), r.dot(o), o.dot(o)-1
		root := float64(b*b) - float64(a*c)
		if a == 0 || root < 0 {
			return -1
		}
		return (b + math.Sqrt(root)) / a
	}
	along := f.normal.dot(ray)
	if along <= 0 {
		return -1
	}
	return f.offset / along
}

// buildObject fills the object's disc with dots.
func (f *flow) buildObject(t Trial) {
	f.objects = int(f.v.Num(flowObjectDots))
	z := f.v.Num(flowObjectDistance)
	x, y := exact.Radians(f.v.Num(flowObjectX)), exact.Radians(f.v.Num(flowObjectY))
	f.middle = vector{float64(z * exact.Tan(x)), float64(z * exact.Tan(y)), z}
	f.radius = float64(z * exact.Tan(exact.Radians(f.v.Num(flowObjectSize)/2)))
	seconds := t.IntervalMs / 1000
	f.drift = vector{float64(f.v.Num(flowObjectVX) * seconds), float64(f.v.Num(flowObjectVY) * seconds), float64(f.v.Num(flowObjectVZ) * seconds)}
	s := random.NewSub(t.Seed, t.Number, random.PurposeMask, t.Place)
	for i := range f.object[:f.objects] {
		r := float64(f.radius * math.Sqrt(s.Float64()))
		sin, cos := exact.SinCos(float64(float64(2*exact.Pi) * s.Float64()))
		f.object[i] = vector{float64(r * cos), float64(r * sin), 0}
	}
}

func (f *flow) Step(n int, l *List) {
	for range n {
		f.advance()
	}
	for i := range f.dots[:f.n] {
		if p := f.dots[i].vector; p.z > 0 && !f.hidden(p) {
			f.show(p, l)
		}
	}
	for i := range f.object[:f.objects] {
		if p := f.middle.plus(f.object[i], 1); f.visible(p) {
			f.show(p, l)
		}
	}
}

// advance moves everything by one refresh interval.
func (f *flow) advance() {
	f.normal = f.rotation.apply(f.normal)
	f.offset -= f.rotation.apply(f.move).dot(f.normal)
	f.origin = f.rotation.apply(f.origin.plus(f.move, -1))
	for i := range f.dots[:f.n] {
		d := &f.dots[i]
		if f.lifetime > 0 {
			d.age++
			if d.age >= f.lifetime {
				d.age = 0
				f.renew(d)
				continue
			}
		}
		was := d.vector
		d.vector = f.rotation.apply(was.plus(f.move, -1))
		if d.noise && was.z > 0 && d.z > 0 {
			d.vector = f.astray(was, d)
		}
		if !f.visible(d.vector) || d.z > f.far {
			f.renew(d)
		}
	}
	if f.objects > 0 {
		f.middle = f.rotation.apply(f.middle.plus(f.move, -1).plus(f.drift, 1))
		f.drift = f.rotation.apply(f.drift)
		for i := range f.object[:f.objects] {
			f.object[i] = f.rotation.apply(f.object[i])
		}
	}
	if f.v.Choice(flowPath) == 0 {
		f.move = f.rotation.apply(f.move)
	}
}

// astray is where a noise dot goes: its image displacement is turned by its own angle.
func (f *flow) astray(was vector, d *flowDot) vector {
	x, y := was.x/was.z, was.y/was.z
	dx, dy := d.x/d.z-x, d.y/d.z-y
	x += float64(dx*d.cos) - float64(dy*d.sin)
	y += float64(dx*d.sin) + float64(dy*d.cos)
	return vector{float64(x * d.z), float64(y * d.z), d.z}
}

func (f *flow) visible(p vector) bool {
	return p.z >= f.near && math.Abs(p.x) <= p.z*f.tanX && math.Abs(p.y) <= p.z*f.tanY
}

// hidden tells whether the object lies before p.
func (f *flow) hidden(p vector) bool {
	if f.objects == 0 || f.middle.z <= 0 || p.z <= f.middle.z {
		return false
	}
	x, y := p.x/p.z-f.middle.x/f.middle.z, p.y/p.z-f.middle.y/f.middle.z
	r := f.radius / f.middle.z
	return float64(x*x)+float64(y*y) < r*r
}

// show draws p where its line of sight meets a flat screen.
func (f *flow) show(p vector, l *List) {
	l.AddDot(Dot{
		float32(f.centreX + exact.Degrees(exact.Atan(p.x/p.z))), float32(f.centreY + exact.Degrees(exact.Atan(p.y/p.z))),
		float32(f.v.Num(flowDiameter)), float32(f.v.Num(flowContrast)),
	})
}

func (f *flow) Truths(add func(name string, value float64)) {
	add("dots", float64(f.n))
	if f.move.z != 0 {
		// Heading in the field, also where it lies outside or behind.
		add("focus_x_deg", exact.Degrees(exact.Atan(f.move.x/f.move.z)))
		add("focus_y_deg", exact.Degrees(exact.Atan(f.move.y/f.move.z)))
	}
}
