package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of dots, in the order of dotsKind.Params.
const (
	dotsCoherence = iota
	dotsDirection
	dotsSpeed
	dotsDensity
	dotsDiameter
	dotsAperture
	dotsWidth
	dotsHeight
	dotsInner
	dotsLifetime
	dotsReentry
	dotsContrast
	dotsPolarity
	dotsNoise
	dotsSignal
	dotsCounting
	dotsSets
	dotsBandwidth
)

const (
	apertureCircle = iota
	apertureAnnulus
	apertureRectangle
)

const (
	noisePosition = iota
	noiseWalk
	noiseDirection
)

// maxDots keeps a frame's list within what a slow screen can draw.
const maxDots = 4000

var dotsKind = &Kind{
	Name: "dots",
	Doc: "Random-dot kinematogram: a share of the dots (coherence) moves in one direction, the others by one of the noise rules " +
		"of Scase, Braddick and Raymond (1996, Vision Res 36:2579). The number of dots in a frame is constant.",
	Params: []Param{
		dotsCoherence: {Key: "coherence", Doc: "share of signal dots", Min: 0, Max: 1, Default: []float64{0.5}},
		dotsDirection: {Key: "direction_deg", Unit: "deg", Doc: "direction of the signal, counter-clockwise from rightwards", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		dotsSpeed:     {Key: "speed_deg_per_s", Unit: "deg/s", Doc: "speed of signal dots and of moving noise dots", Min: 0, Max: 200, Default: []float64{5}},
		dotsDensity:   {Key: "density_per_deg2", Unit: "dots/deg²", Doc: "dots shown at a time per area of the aperture", Min: 0.01, Max: 100, Default: []float64{2}},
		dotsDiameter:  {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot", Min: 0.01, Max: 5, Default: []float64{0.15}},
		dotsAperture:  {Key: "aperture", Doc: "shape of the field", Type: Choice, Options: []string{"circle", "annulus", "rectangle"}, Default: []float64{apertureCircle}},
		dotsWidth:     {Key: "width_deg", Unit: "deg", Doc: "diameter of circle or annulus, width of a rectangle", Min: 0.1, Max: 100, Default: []float64{8}},
		dotsHeight:    {Key: "height_deg", Unit: "deg", Doc: "height of a rectangle", Min: 0.1, Max: 100, Default: []float64{8}},
		dotsInner:     {Key: "inner_diameter_deg", Unit: "deg", Doc: "diameter of an annulus's hole", Min: 0, Max: 100, Default: []float64{1}},
		dotsLifetime:  {Key: "lifetime_ms", Unit: "ms", Doc: "a dot moves to a random place after so long, first ages are uniform; 0: unlimited", Min: 0, Max: 60000, Default: []float64{0}},
		dotsReentry:   {Key: "reentry", Doc: "where a dot that leaves the aperture comes back", Type: Choice, Options: []string{"opposite", "random"}, Default: []float64{0}},
		dotsContrast:  {Key: "contrast", Doc: "Weber contrast of a dot, its sign is polarity's", Min: 0, Max: 1, Default: []float64{1}},
		dotsPolarity:  {Key: "polarity", Doc: "lighter or darker than the background, or half of each", Type: Choice, Options: []string{"light", "dark", "mixed"}, Default: []float64{0}},
		dotsNoise:     {Key: "noise", Doc: "what noise dots do: a random place each step, a step in a new random direction, or in a direction kept for life", Type: Choice, Options: []string{"random_position", "random_walk", "random_direction"}, Default: []float64{noisePosition}},
		dotsSignal:    {Key: "signal_dots", Doc: "the same dots carry the signal throughout, or they are drawn anew at each step", Type: Choice, Options: []string{"same", "redrawn"}, Default: []float64{0}},
		dotsCounting:  {Key: "signal_count", Doc: "number of signal dots: round(coherence × dots), or each dot with probability coherence", Type: Choice, Options: []string{"fixed", "binomial"}, Default: []float64{0}},
		dotsSets:      {Key: "interleaved_sets", Doc: "sets of dots shown in turn, each moving so many times as far (Britten, Shadlen, Newsome and Movshon 1992, J Neurosci 12:4745 used 3)", Type: Integer, Min: 1, Max: 6, Default: []float64{1}},
		dotsBandwidth: {Key: "direction_sd_deg", Unit: "deg", Doc: "standard deviation of the signal dots' own directions about direction_deg, kept for life", Min: 0, Max: 180, Default: []float64{0}},
	},
	Check: checkDots,
	Extent: func(v Values) (float64, float64) {
		d := v.Num(dotsDiameter)
		if v.Choice(dotsAperture) == apertureRectangle {
			return v.Num(dotsWidth) + d, v.Num(dotsHeight) + d
		}
		return v.Num(dotsWidth) + d, v.Num(dotsWidth) + d
	},
	New: func(v Values) Display { return newDots(v) },
}

func checkDots(v Values, problem func(key, message string)) {
	if v.Choice(dotsAperture) == apertureAnnulus && v.Num(dotsInner) >= v.Num(dotsWidth) {
		problem("inner_diameter_deg", "the hole must be smaller than width_deg")
	}
	n := dotCount(v)
	if n < 1 {
		problem("density_per_deg2", "not one dot fits: raise density_per_deg2 or the size of the aperture")
	}
	if n*int(v.Num(dotsSets)) > maxDots {
		problem("density_per_deg2", "more than 4000 dots would be needed: lower density_per_deg2 or the size of the aperture")
	}
}

// dotCount is the number of dots in a frame.
func dotCount(v Values) int {
	area := float64(exact.Pi / 4 * float64(v.Num(dotsWidth)*v.Num(dotsWidth)))
	switch v.Choice(dotsAperture) {
	case apertureAnnulus:
		area -= float64(exact.Pi / 4 * float64(v.Num(dotsInner)*v.Num(dotsInner)))
	case apertureRectangle:
		area = float64(v.Num(dotsWidth) * v.Num(dotsHeight))
	}
	return int(exact.Round(float64(v.Num(dotsDensity) * area)))
}

// dots is a random-dot kinematogram. Dots of all sets lie behind one another:
// set s owns [s·n, (s+1)·n).
type dots struct {
	v        Values
	n        int // in a frame
	sets     int
	x, y     []float64 // about the field's centre
	cos, sin []float64 // each dot's direction as noise, used by random_direction
	ownCos   []float64 // each dot's direction as signal, used by direction_sd_deg
	ownSin   []float64
	signal   []bool
	age      []int
	sign     []float32
	order    []int

	centreX, centreY float64
	step             float64 // degrees a dot moves when its set is shown
	interval         float64
	frame            int
	lifetime         int // in updates of a set, 0: unlimited
	signalShown      int
	dirCos, dirSin   float64

	place, draw, noise, life, polarity random.Stream
}

func newDots(v Values) *dots {
	d := &dots{}
	d.room(v)
	return d
}

func (d *dots) room(v Values) {
	d.v, d.n, d.sets = v, dotCount(v), int(v.Num(dotsSets))
	total := d.n * d.sets
	if cap(d.x) < total {
		d.x, d.y = make([]float64, total), make([]float64, total)
		d.cos, d.sin = make([]float64, total), make([]float64, total)
		d.ownCos, d.ownSin = make([]float64, total), make([]float64, total)
		d.signal, d.age = make([]bool, total), make([]int, total)
		d.sign, d.order = make([]float32, total), make([]int, total)
	}
	d.x, d.y, d.cos, d.sin = d.x[:total], d.y[:total], d.cos[:total], d.sin[:total]
	d.ownCos, d.ownSin = d.ownCos[:total], d.ownSin[:total]
	d.signal, d.age, d.sign, d.order = d.signal[:total], d.age[:total], d.sign[:total], d.order[:total]
}

func (d *dots) Size() (dotsMax, patches, batches int) { return maxDots, 0, 1 }

func (d *dots) Begin(t Trial) {
	d.room(t.Values)
	d.centreX, d.centreY = t.XDeg, t.YDeg
	d.place = random.NewSub(t.Seed, t.Number, random.PurposeDots, t.Place)
	d.draw = random.NewSub(t.Seed, t.Number, random.PurposeSignal, t.Place)
	d.noise = random.NewSub(t.Seed, t.Number, random.PurposeNoise, t.Place)
	d.life = random.NewSub(t.Seed, t.Number, random.PurposeLifetime, t.Place)
	d.polarity = random.NewSub(t.Seed, t.Number, random.PurposePolarity, t.Place)

	d.interval = t.IntervalMs
	d.steer()
	d.frame = 0
	d.lifetime = 0
	if ms := d.v.Num(dotsLifetime); ms > 0 {
		d.lifetime = max(1, int(exact.Round(ms/(t.IntervalMs*float64(d.sets)))))
	}
	for i := range d.x {
		d.x[i], d.y[i] = d.randomPlace()
		d.age[i] = 0
		if d.lifetime > 0 {
			d.age[i] = d.life.Intn(d.lifetime)
		}
		d.sign[i] = d.drawSign(i)
	}
	for s := range d.sets {
		d.drawSignal(s)
	}
	for i := range d.x {
		d.aim(i)
	}
	d.signalShown = d.countSignal(0)
}

// steer takes speed and direction from the values.
func (d *dots) steer() {
	d.step = float64(d.v.Num(dotsSpeed) * d.interval / 1000 * float64(d.sets))
	d.dirSin, d.dirCos = exact.SinCos(exact.Radians(d.v.Num(dotsDirection)))
}

// Change implements Changer. With another coherence the signal dots are drawn anew.
func (d *dots) Change(i int, x float64) bool {
	switch i {
	case dotsCoherence, dotsSpeed, dotsContrast, dotsDiameter:
	case dotsDirection:
		if d.v.Num(dotsBandwidth) > 0 { // each dot has a direction of its own for life
			return false
		}
	default:
		return false
	}
	d.v[i][0] = x
	d.steer()
	if i == dotsCoherence {
		for s := range d.sets {
			d.drawSignal(s)
		}
	}
	return true
}

// drawSign gives half of the dots each polarity when they are mixed.
func (d *dots) drawSign(i int) float32 {
	switch d.v.Choice(dotsPolarity) {
	case 0:
		return 1
	case 1:
		return -1
	}
	if i%2 == 0 {
		return 1
	}
	return -1
}

// drawSignal decides which dots of set s carry the signal.
func (d *dots) drawSignal(s int) {
	coherence := d.v.Num(dotsCoherence)
	from, to := s*d.n, (s+1)*d.n
	if d.v.Choice(dotsCounting) == 1 {
		for i := from; i < to; i++ {
			d.signal[i] = d.draw.Float64() < coherence
		}
		return
	}
	k := int(exact.Round(float64(coherence * float64(d.n))))
	order := d.order[from:to]
	for i := range order {
		order[i] = from + i
		d.signal[from+i] = false
	}
	for i := range k {
		j := i + d.draw.Intn(d.n-i)
		order[i], order[j] = order[j], order[i]
		d.signal[order[i]] = true
	}
}

func (d *dots) countSignal(s int) int {
	k := 0
	for i := s * d.n; i < (s+1)*d.n; i++ {
		if d.signal[i] {
			k++
		}
	}
	return k
}

// aim gives dot i its directions, as noise and as signal, for the rest of its life.
func (d *dots) aim(i int) {
	if d.v.Choice(dotsNoise) == noiseDirection {
		d.sin[i], d.cos[i] = exact.SinCos(float64(float64(2*exact.Pi) * d.noise.Float64()))
	}
	if sd := d.v.Num(dotsBandwidth); sd > 0 {
		angle := exact.Radians(d.v.Num(dotsDirection) + float64(sd*d.noise.Normal()))
		d.ownSin[i], d.ownCos[i] = exact.SinCos(angle)
	}
}

func (d *dots) Step(n int, l *List) {
	for range n {
		d.frame++
		d.advance(d.frame % d.sets)
	}
	set := d.frame % d.sets
	diameter := float32(d.v.Num(dotsDiameter))
	contrast := float32(d.v.Num(dotsContrast))
	for i := set * d.n; i < (set+1)*d.n; i++ {
		l.AddDot(Dot{float32(d.centreX + d.x[i]), float32(d.centreY + d.y[i]), diameter, float32(contrast * d.sign[i])})
	}
}

// advance moves the dots of set s by one update. In the first round each set
// other than the first only appears.
func (d *dots) advance(s int) {
	if d.frame < d.sets {
		return
	}
	if d.v.Choice(dotsSignal) == 1 {
		d.drawSignal(s)
	}
	bandwidth := d.v.Num(dotsBandwidth) > 0
	for i := s * d.n; i < (s+1)*d.n; i++ {
		if d.lifetime > 0 {
			d.age[i]++
			if d.age[i] >= d.lifetime {
				d.age[i] = 0
				d.x[i], d.y[i] = d.randomPlace()
				d.aim(i)
				continue
			}
		}
		switch {
		case d.signal[i] && bandwidth:
			d.move(i, d.ownCos[i], d.ownSin[i])
		case d.signal[i]:
			d.move(i, d.dirCos, d.dirSin)
		default:
			d.moveNoise(i)
		}
	}
}

func (d *dots) moveNoise(i int) {
	switch d.v.Choice(dotsNoise) {
	case noisePosition:
		d.x[i], d.y[i] = d.randomPlace()
	case noiseWalk:
		sin, cos := exact.SinCos(float64(float64(2*exact.Pi) * d.noise.Float64()))
		d.move(i, cos, sin)
	default:
		d.move(i, d.cos[i], d.sin[i])
	}
}

// move takes dot i one step along (cos, sin) and brings it back into the aperture.
func (d *dots) move(i int, cos, sin float64) {
	d.x[i] += float64(d.step * cos)
	d.y[i] += float64(d.step * sin)
	if d.inside(d.x[i], d.y[i]) {
		return
	}
	if d.v.Choice(dotsReentry) == 0 {
		d.reenter(i, cos, sin)
	}
	if !d.inside(d.x[i], d.y[i]) {
		d.x[i], d.y[i] = d.randomPlace()
	}
}

// reenter moves dot i back by the length of the aperture along its path, which
// keeps the density uniform.
func (d *dots) reenter(i int, cos, sin float64) {
	if d.v.Choice(dotsAperture) == apertureRectangle {
		d.x[i] = wrap(d.x[i], d.v.Num(dotsWidth))
		d.y[i] = wrap(d.y[i], d.v.Num(dotsHeight))
		return
	}
	along := float64(d.x[i]*cos) + float64(d.y[i]*sin)
	across := float64(d.y[i]*cos) - float64(d.x[i]*sin)
	outer := d.v.Num(dotsWidth) / 2
	half := math.Sqrt(max(0, float64(outer*outer)-float64(across*across)))
	switch inner := d.v.Num(dotsInner) / 2; {
	case along > half:
		along -= float64(2 * half)
	case d.v.Choice(dotsAperture) == apertureAnnulus && math.Abs(across) < inner:
		along += float64(2 * math.Sqrt(float64(inner*inner)-float64(across*across)))
	}
	d.x[i] = float64(along*cos) - float64(across*sin)
	d.y[i] = float64(along*sin) + float64(across*cos)
}

// wrap brings x into [−size/2, size/2).
func wrap(x, size float64) float64 { return x - float64(size*math.Floor(x/size+0.5)) }

func (d *dots) inside(x, y float64) bool {
	w := d.v.Num(dotsWidth)
	if d.v.Choice(dotsAperture) == apertureRectangle {
		return math.Abs(x) <= w/2 && math.Abs(y) <= d.v.Num(dotsHeight)/2
	}
	r2 := float64(x*x) + float64(y*y)
	if 4*r2 > w*w {
		return false
	}
	inner := d.v.Num(dotsInner)
	return d.v.Choice(dotsAperture) == apertureCircle || 4*r2 >= inner*inner
}

// randomPlace is uniform over the aperture.
func (d *dots) randomPlace() (x, y float64) {
	w := d.v.Num(dotsWidth)
	if d.v.Choice(dotsAperture) == apertureRectangle {
		h := d.v.Num(dotsHeight)
		return d.place.Range(-w/2, w/2), d.place.Range(-h/2, h/2)
	}
	inner := 0.0
	if d.v.Choice(dotsAperture) == apertureAnnulus {
		inner = d.v.Num(dotsInner)
	}
	for {
		r := math.Sqrt(d.place.Range(float64(inner*inner), float64(w*w))) / 2
		sin, cos := exact.SinCos(float64(float64(2*exact.Pi) * d.place.Float64()))
		x, y = float64(r*cos), float64(r*sin)
		if d.inside(x, y) { // rounding can put a dot a hair outside
			return x, y
		}
	}
}

func (d *dots) Truths(add func(name string, value float64)) {
	add("dots", float64(d.n))
	add("signal_dots_at_onset", float64(d.signalShown))
}
