package display

import (
	"math"
	"testing"
)

func openDisplay(k *Kind, set map[int]float64, seed uint64, intervalMs float64) (Display, Values) {
	v := k.Defaults()
	for i, x := range set {
		v[i] = []float64{x}
	}
	d := k.New(v)
	d.Begin(Trial{Values: v, Seed: seed, IntervalMs: intervalMs})
	return d, v
}

// Two transparent fields: each dot of each field moves in its field's direction
// at its field's speed; their densities are those asked for.
func TestFieldsAreTransparent(t *testing.T) {
	t.Parallel()
	v := fieldsKind.Defaults()
	v[fieldsDirection] = []float64{20}
	v[fieldsDirections] = []float64{0, 90, -90}
	v[fieldsSpeeds] = []float64{6, 3}
	v[fieldsDensities] = []float64{2, 1}
	f := &fields{}
	f.Begin(Trial{Values: v, Seed: 1, IntervalMs: 1000.0 / 60})
	l := NewList(f.Size())
	f.Step(0, l)
	first := append([]Dot(nil), l.Dots...)
	l.Reset()
	f.Step(1, l)
	// π/4 · 8² · 2 = 100.5 dots, half of it in the other two fields.
	if got := []int{len(f.part[0].x), len(f.part[1].x), len(f.part[2].x)}; got[0] != 101 || got[1] != 50 || got[2] != 50 {
		t.Fatalf("dots: %v", got)
	}
	i := 0
	for part, want := range []struct{ direction, speed float64 }{{20, 6}, {110, 3}, {-70, 3}} {
		right := 0
		for range f.part[part].x {
			dx, dy := float64(l.Dots[i].XDeg-first[i].XDeg), float64(l.Dots[i].YDeg-first[i].YDeg)
			sin, cos := math.Sincos(want.direction * math.Pi / 180)
			if math.Hypot(dx-want.speed/60*cos, dy-want.speed/60*sin) < 1e-5 {
				right++
			}
			i++
		}
		if n := len(f.part[part].x); right < n*9/10 { // the others came back on the other side
			t.Errorf("field %d: %d of %d dots move as they should", part, right, n)
		}
	}
}

// Directions and speeds of the dots follow their distributions: standard
// deviation of direction, and of speed in octaves.
func TestFieldsDistributions(t *testing.T) {
	t.Parallel()
	_, v := openDisplay(fieldsKind, map[int]float64{fieldsDirections: 0, fieldsDensities: 30, fieldsDirectionSD: 25, fieldsSpeedSD: 0.5}, 3, 1000.0/60)
	f := &fields{}
	f.Begin(Trial{Values: v, Seed: 3, IntervalMs: 1000.0 / 60})
	var directions, octaves []float64
	p := &f.part[0]
	for i := range p.x {
		directions = append(directions, math.Atan2(p.vy[i], p.vx[i])*180/math.Pi)
		octaves = append(octaves, math.Log2(math.Hypot(p.vx[i], p.vy[i])*60/4))
	}
	n := float64(len(directions))
	for name, want := range map[string]struct {
		x  []float64
		sd float64
	}{"direction": {directions, 25}, "speed": {octaves, 0.5}} {
		mean, square := 0.0, 0.0
		for _, x := range want.x {
			mean += x / n
		}
		for _, x := range want.x {
			square += (x - mean) * (x - mean) / (n - 1)
		}
		sd := math.Sqrt(square)
		// Standard errors of mean and standard deviation: σ/√n and σ/√(2n).
		if math.Abs(mean) > 4*want.sd/math.Sqrt(n) || math.Abs(sd-want.sd) > 4*want.sd/math.Sqrt(2*n) {
			t.Errorf("%s: mean %.3f, sd %.3f, want 0 and %v", name, mean, sd, want.sd)
		}
	}
}

// Dots with any velocities in a circle or rectangle stay inside and uniform.
func TestFieldStaysUniform(t *testing.T) {
	t.Parallel()
	for _, round := range []bool{true, false} {
		f := &field{}
		f.open(Trial{Seed: 5, IntervalMs: 10}, 0, 2000, round, 10, 6, 0)
		for i := range f.vx {
			f.vx[i], f.vy[i] = 0.3*math.Cos(float64(i)), 0.3*math.Sin(float64(i))
		}
		for range 400 {
			f.advance()
		}
		sum := 0.0
		for i := range f.x {
			if !f.inside(f.x[i], f.y[i]) {
				t.Fatalf("dot %d is outside at (%v, %v)", i, f.x[i], f.y[i])
			}
			sum += f.x[i] * f.x[i] / 2000
		}
		// Mean of x²: R²/4 in a circle, w²/12 in a rectangle; sd below R²/4 and w²/√180.
		want, se := 25.0/4, 6.25/math.Sqrt(2000)
		if !round {
			want, se = 100.0/12, 100/math.Sqrt(180*2000)
		}
		if math.Abs(sum-want) > 4*se {
			t.Errorf("round %v: mean of x² %.3f, want %.3f", round, sum, want)
		}
	}
}

// In no frame is there a figure: dots are as dense inside as outside; between
// frames all dots inside move with the figure.
func TestMotionForm(t *testing.T) {
	t.Parallel()
	for carried := range 2 {
		d, v := openDisplay(formKind, map[int]float64{formCarried: float64(carried), formDensity: 20, formFigureSpeed: 4, formGroundSpeed: 2, formTurn: 30}, 7, 1000.0/60)
		f := d.(*form)
		inside, total := 0.0, 0.0
		l := NewList(f.Size())
		for n := range 30 {
			l.Reset()
			f.Step(min(n, 1), l)
			x, y := f.centre()
			for _, dot := range l.Dots {
				if f.inFigure(float64(dot.XDeg)-x, float64(dot.YDeg)-y) {
					inside++
				}
				total++
			}
		}
		if f.v.Num(formX) != v.Num(formX) {
			t.Fatal("values changed")
		}
		// The figure is 4 × 2 of 10 × 8 deg. One frame has 1600 dots, frames are not independent.
		if share := inside / total; math.Abs(share-0.1) > 4*math.Sqrt(0.09/1600) {
			t.Errorf("border %d: %.4f of the dots lie in the figure, want 0.1", carried, share)
		}
		x, _ := f.centre()
		if want := float64(carried) * 4 * 29 / 60; math.Abs(x-want) > 1e-9 {
			t.Errorf("border %d: the figure moved %v, want %v", carried, x, want)
		}
		got := 0.0
		f.Truths(func(_ string, x float64) { got = x })
		if math.Abs(got-6) > 1e-9 {
			t.Errorf("relative speed %v, want 4 + 2 deg/s", got)
		}
	}
}
