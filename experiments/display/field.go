package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// maxFieldDots is the most dots of one field.
const maxFieldDots = 2000

// field is a set of dots that each keep a velocity of their own, in a circle or
// rectangle about the origin. A dot that leaves comes back on the opposite side
// of its own path, which keeps the density uniform.
type field struct {
	x, y, vx, vy  []float64 // deg, deg per refresh interval
	age           []int
	round         bool
	width, height float64
	lifetime      int // refresh intervals, 0: unlimited
	place, life   random.Stream
}

// open empties the field and gives it n dots at random places, still.
// sub keeps the streams of several fields of a display apart.
func (f *field) open(t Trial, sub uint32, n int, round bool, width, height, lifetimeMs float64) {
	n = min(n, maxFieldDots)
	if f.x == nil {
		f.x, f.y = make([]float64, maxFieldDots), make([]float64, maxFieldDots)
		f.vx, f.vy = make([]float64, maxFieldDots), make([]float64, maxFieldDots)
		f.age = make([]int, maxFieldDots)
	}
	f.x, f.y, f.vx, f.vy, f.age = f.x[:n], f.y[:n], f.vx[:n], f.vy[:n], f.age[:n]
	f.round, f.width, f.height = round, width, height
	f.place = random.NewSub(t.Seed, t.Number, random.PurposeDots, subPlace(t, sub))
	f.life = random.NewSub(t.Seed, t.Number, random.PurposeLifetime, subPlace(t, sub))
	f.lifetime = 0
	if lifetimeMs > 0 {
		f.lifetime = holdFrames(lifetimeMs, t.IntervalMs)
	}
	for i := range f.x {
		f.x[i], f.y[i] = f.randomPlace()
		f.vx[i], f.vy[i], f.age[i] = 0, 0, 0
		if f.lifetime > 0 {
			f.age[i] = f.life.Intn(f.lifetime)
		}
	}
}

// subPlace numbers the streams of a display's parts.
func subPlace(t Trial, sub uint32) uint32 { return t.Place<<8 | sub }

// drive gives all dots the same velocity, in degrees per refresh interval.
func (f *field) drive(vx, vy float64) {
	for i := range f.vx {
		f.vx[i], f.vy[i] = vx, vy
	}
}

// advance moves every dot by one refresh interval.
func (f *field) advance() {
	for i := range f.x {
		if f.lifetime > 0 {
			f.age[i]++
			if f.age[i] >= f.lifetime {
				f.age[i] = 0
				f.x[i], f.y[i] = f.randomPlace()
				continue
			}
		}
		f.x[i] += f.vx[i]
		f.y[i] += f.vy[i]
		if !f.inside(f.x[i], f.y[i]) {
			f.comeBack(i)
		}
	}
}

func (f *field) inside(x, y float64) bool {
	if f.round {
		return 4*(float64(x*x)+float64(y*y)) <= f.width*f.width
	}
	return math.Abs(x) <= f.width/2 && math.Abs(y) <= f.height/2
}

func (f *field) comeBack(i int) {
	if !f.round {
		f.x[i], f.y[i] = wrap(f.x[i], f.width), wrap(f.y[i], f.height)
		return
	}
	speed := exact.Hypot(f.vx[i], f.vy[i])
	if speed > 0 {
		cos, sin := f.vx[i]/speed, f.vy[i]/speed
		along := float64(f.x[i]*cos) + float64(f.y[i]*sin)
		across := float64(f.y[i]*cos) - float64(f.x[i]*sin)
		along -= math.Sqrt(max(0, float64(f.width*f.width)-float64(4*across*across)))
		f.x[i] = float64(along*cos) - float64(across*sin)
		f.y[i] = float64(along*sin) + float64(across*cos)
	}
	if !f.inside(f.x[i], f.y[i]) {
		f.x[i], f.y[i] = f.randomPlace()
	}
}

// randomPlace is uniform over the field.
func (f *field) randomPlace() (x, y float64) {
	for {
		x, y = f.place.Range(-f.width/2, f.width/2), f.place.Range(-f.height/2, f.height/2)
		if f.inside(x, y) {
			return x, y
		}
	}
}

// fieldCount is the number of dots of a density in a circle or rectangle.
func fieldCount(density float64, round bool, width, height float64) int {
	area := float64(width * height)
	if round {
		area = float64(exact.Pi / 4 * float64(width*width))
	}
	return int(exact.Round(float64(density * area)))
}

// checkCount reports a number of dots that a field cannot have.
func checkCount(n int, key string, problem func(key, message string)) {
	if n > maxFieldDots {
		problem(key, "more than 2000 dots would be needed: lower it or the size of the field")
	}
	if n < 1 {
		problem(key, "not one dot fits: raise it or the size of the field")
	}
}
