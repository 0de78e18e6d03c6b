package display

import (
	"math"
	"testing"
)

// Dots of a sphere in parallel projection move on ellipses about the axis: their
// height is constant, and x² + (dx/dθ)² is the squared radius of their circle.
func TestSphereIsRigid(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(structureKind, map[int]float64{structureRotation: 60, structureDiameter: 8}, 2, 1000.0/60)
	l := NewList(d.Size())
	var frames [3][]Dot
	for n := range frames {
		l.Reset()
		d.Step(min(n, 1), l)
		frames[n] = append([]Dot(nil), l.Dots...)
	}
	step := 1.0 * math.Pi / 180 // 60 deg/s at 60 Hz
	leftward := 0
	for i := range frames[1] {
		a, b, c := frames[0][i], frames[1][i], frames[2][i]
		if a.YDeg != b.YDeg || b.YDeg != c.YDeg {
			t.Fatalf("dot %d moves along the axis", i)
		}
		// Central difference of a sinusoid: (c − a)/(2 sin step).
		slope := float64(c.XDeg-a.XDeg) / (2 * math.Sin(step))
		r2 := float64(b.XDeg*b.XDeg) + slope*slope + float64(b.YDeg*b.YDeg)
		if math.Abs(r2-16) > 1e-3 {
			t.Fatalf("dot %d lies %v deg from the centre, want 4", i, math.Sqrt(r2))
		}
		if c.XDeg < a.XDeg {
			leftward++
		}
	}
	// Half of the dots are on the far side; binomial sd for 200 is 7.
	if n := len(frames[0]); n != 200 || leftward < 100-28 || leftward > 100+28 {
		t.Errorf("%d of %d dots move leftwards", leftward, n)
	}
}

// With an opaque surface only dots that move with the front are seen, whatever the perspective.
func TestOpaqueShowsTheFront(t *testing.T) {
	t.Parallel()
	for _, distance := range []float64{0, 4} {
		for _, shape := range []float64{shapeSphere, shapeCylinder} {
			d, _ := openDisplay(structureKind, map[int]float64{structureSurface: 1, structureShape: shape, structureDistance: distance, structureHeight: 2, structureDots: 1000}, 2, 1)
			s := d.(*structure)
			l := NewList(s.Size())
			s.Step(0, l)
			shown := len(l.Dots)
			// An eye at d radii sees a share (1 − 1/d)/2 of a sphere, acos(1/d)/π of a cylinder.
			want := 0.5
			switch {
			case distance > 0 && shape == shapeSphere:
				want = (1 - 1/distance) / 2
			case distance > 0:
				want = math.Acos(1/distance) / math.Pi
			}
			if share := float64(shown) / 1000; math.Abs(share-want) > 4*math.Sqrt(want*(1-want)/1000) {
				t.Errorf("shape %v, distance %v: %.3f of the dots are seen, want %.3f", shape, distance, share, want)
			}
		}
	}
}

// Curvatures of a patch from shape index and curvedness: index = 2/π
// atan((k1+k2)/(k1−k2)), curvedness² = (k1²+k2²)/2 (Koenderink and van Doorn 1992).
func TestPatchCurvature(t *testing.T) {
	t.Parallel()
	for _, index := range []float64{-1, -0.5, -0.2, 0, 0.5, 0.9} {
		d, _ := openDisplay(structureKind, map[int]float64{structureShape: shapePatch, structureSwing: 20, structureIndex: index, structureCurvedness: 0.8, structureDiameter: 6}, 2, 10)
		s := d.(*structure)
		// Towards the viewer is up: the sign convention counts a cap as positive.
		k1, k2 := -s.k1, -s.k2
		if got := 2 / math.Pi * math.Atan2(k1+k2, k1-k2); math.Abs(got-index) > 1e-9 {
			t.Errorf("shape index %v, want %v", got, index)
		}
		if got := math.Sqrt((k1*k1+k2*k2)/2) * 3; math.Abs(got-0.8) > 1e-9 {
			t.Errorf("curvedness %v, want 0.8", got)
		}
	}
}

// Nothing reaches beyond the extent that the kind states.
func TestStructureKeepsToItsExtent(t *testing.T) {
	t.Parallel()
	for _, set := range []map[int]float64{
		{structureShape: shapeSphere, structureDistance: 2},
		{structureShape: shapeCylinder, structureHeight: 9, structureAxis: 30, structureDistance: 6},
		{structureShape: shapePatch, structureSwing: 60, structureSlant: 50, structureTilt: 20, structureCurvedness: 1, structureIndex: -0.4, structureDistance: 5},
	} {
		d, v := openDisplay(structureKind, set, 9, 1000.0/60)
		width, _ := structureKind.Extent(v)
		l := NewList(d.Size())
		for n := range 200 {
			l.Reset()
			d.Step(min(n, 1), l)
			for _, dot := range l.Dots {
				if r := math.Hypot(float64(dot.XDeg), float64(dot.YDeg)); 2*r > width+1e-4 {
					t.Fatalf("%v: a dot lies %v deg out, the extent is %v", set, r, width/2)
				}
			}
		}
	}
}
