package display

import (
	"math"
	"testing"
)

func patches(d Display, n int) []*List {
	var out []*List
	for i := range n {
		l := NewList(d.Size())
		d.Step(min(i, 1), l)
		out = append(out, l)
	}
	return out
}

// Phase advances by speed × time while adapting, stays in the pause, and the
// test begins where adaptation stopped (Mather, Verstraten and Anstis 1998).
func TestAdaptationPhase(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(adaptationKind, map[int]float64{
		adaptationAdaptMs: 1000, adaptationGapMs: 100, adaptationSpeed: 3, adaptationTest: testDrift, adaptationTestSpeed: -1.5, adaptationFrequency: 1,
	}, 4, 1000.0/60)
	f := patches(d, 120)
	step := func(i int) float64 {
		return math.Remainder(float64(f[i].Patches[0].PhaseRad)-float64(f[i-1].Patches[0].PhaseRad), 2*math.Pi)
	}
	for i := range f {
		shown := i < 60 || i >= 66
		if (len(f[i].Patches) == 1) != shown {
			t.Fatalf("frame %d has %d patches", i, len(f[i].Patches))
		}
		switch {
		case i > 0 && i < 60 && math.Abs(step(i)+2*math.Pi*3/60) > 1e-5:
			t.Fatalf("frame %d: step %v while adapting", i, step(i))
		case i > 66 && math.Abs(step(i)-2*math.Pi*1.5/60) > 1e-5:
			t.Fatalf("frame %d: step %v in the test", i, step(i))
		}
	}
	last, test := f[59].Patches[0], f[66].Patches[0]
	if jump := math.Remainder(float64(test.PhaseRad-last.PhaseRad)+2*math.Pi*3/60, 2*math.Pi); math.Abs(jump) > 1e-5 {
		t.Errorf("the test begins %v rad from where adaptation ended", jump)
	}
	if last.Contrast != 0.8 || test.Contrast != 0.4 {
		t.Errorf("contrasts %v and %v", last.Contrast, test.Contrast)
	}
}

// The same with dots: they move, vanish and stand still, each in its place.
func TestAdaptationDots(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(adaptationKind, map[int]float64{adaptationPattern: patternDots, adaptationAdaptMs: 200, adaptationGapMs: 50, adaptationSpeed: 6, adaptationDirection: 90}, 4, 1000.0/60)
	f := show(d, 40)
	if len(f[0]) != 201 || len(f[12]) != 0 || len(f[15]) != 201 { // 4 dots/deg² in a circle of 8 deg
		t.Fatalf("dots: %d, %d, %d", len(f[0]), len(f[12]), len(f[15]))
	}
	up := 0
	for i := range f[1] {
		if math.Abs(float64(f[1][i].YDeg-f[0][i].YDeg)-0.1) < 1e-5 {
			up++
		}
		if f[15][i] != f[39][i] {
			t.Fatalf("dot %d moves in the still test", i)
		}
	}
	if up < 190 {
		t.Errorf("%d of 201 dots move up by 0.1 deg a frame", up)
	}
}

// A flickering test has no net direction: its dots keep random directions.
func TestAdaptationFlicker(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(adaptationKind, map[int]float64{adaptationPattern: patternDots, adaptationAdaptMs: 0, adaptationTest: testFlicker, adaptationTestSpeed: 6, adaptationDensity: 20}, 4, 1000.0/60)
	f := show(d, 2)
	x, y, n := 0.0, 0.0, 0.0
	for i := range f[0] {
		dx, dy := float64(f[1][i].XDeg-f[0][i].XDeg), float64(f[1][i].YDeg-f[0][i].YDeg)
		if math.Abs(math.Hypot(dx, dy)-0.1) < 1e-5 {
			x, y, n = x+dx/0.1, y+dy/0.1, n+1
		}
	}
	// Mean of n random unit vectors: standard error 1/√(2n) along each axis.
	if se := 1 / math.Sqrt(2*n); n < 900 || math.Abs(x/n) > 4*se || math.Abs(y/n) > 4*se {
		t.Errorf("mean direction (%.3f, %.3f) of %v dots", x/n, y/n, n)
	}
}

// Frame and target move along the axis with their own velocities, centred at centre_ms.
func TestInducedVelocities(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(inducedKind, map[int]float64{inducedTarget: -1, inducedSurround: 3, inducedDirection: 90, inducedCentre: 500}, 4, 10)
	f := patches(d, 101)
	for i, l := range f {
		seconds := float64(i)/100 - 0.5
		if len(l.Patches) != 4 || len(l.Dots) != 1 {
			t.Fatalf("frame %d: %d bars, %d targets", i, len(l.Patches), len(l.Dots))
		}
		if got := float64(l.Patches[2].YDeg); math.Abs(got-3*seconds) > 1e-5 {
			t.Fatalf("frame %d: the frame is at %v, want %v", i, got, 3*seconds)
		}
		if got := float64(l.Dots[0].YDeg); math.Abs(got+seconds) > 1e-5 {
			t.Fatalf("frame %d: the target is at %v, want %v", i, got, -seconds)
		}
	}
}

// A sinusoidal path has the peak speed asked for as it passes its centre.
func TestInducedSinusoid(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(inducedKind, map[int]float64{inducedPath: pathSinusoidal, inducedSurround: 2, inducedFrequency: 0.5, inducedInducer: inducerDots}, 4, 1)
	f := show(d, 2)
	moved := 0
	for i := range f[0][:len(f[0])-1] {
		if math.Abs(float64(f[1][i].XDeg-f[0][i].XDeg)-0.002) < 1e-5 {
			moved++
		}
	}
	if moved < len(f[0])*9/10 {
		t.Errorf("%d of %d dots move 2 deg/s", moved, len(f[0]))
	}
}

// The target stands, steps back, and passes its first place speed·t = step later.
func TestPursuitStepRamp(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(pursuitKind, map[int]float64{
		pursuitSpeed: 8, pursuitStep: 1.6, pursuitHold: 500, pursuitDensity: 0, pursuitBackgroundSpeed: 3, pursuitBackgroundDirection: 180,
	}, 4, 10)
	f := show(d, 80)
	for i, dots := range f {
		want := 0.0
		if i >= 50 {
			want = 8*float64(i-50)/100 - 1.6
		}
		if len(dots) != 1 || math.Abs(float64(dots[0].XDeg)-want) > 1e-5 {
			t.Fatalf("frame %d: %v, want x = %v", i, dots, want)
		}
	}
	got := map[string]float64{}
	d.Truths(func(name string, x float64) { got[name] = x })
	if math.Abs(got["background_on_retina_deg_per_s"]-11) > 1e-9 || math.Abs(math.Abs(got["background_on_retina_direction_deg"])-180) > 1e-9 {
		t.Errorf("truths %v, want 3 + 8 deg/s leftwards", got)
	}
}

// Marks change at the cue; the background jumps by the displacement after delay
// and blank, and is gone in between.
func TestGazeShift(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(gazeKind, map[int]float64{gazeCue: 300, gazeDelay: 100, gazeBlank: 50, gazeDisplacement: 0.7, gazeDisplacementDirection: 90}, 4, 10)
	f := show(d, 60)
	for i, dots := range f {
		mark := dots[len(dots)-1]
		if want := map[bool]float32{true: 4, false: -4}[i >= 30]; mark.XDeg != want || mark.YDeg != 0 {
			t.Fatalf("frame %d: mark at (%v, %v)", i, mark.XDeg, mark.YDeg)
		}
		if blank := i >= 40 && i < 45; blank != (len(dots) == 1) {
			t.Fatalf("frame %d: %d dots", i, len(dots))
		}
	}
	for i := range f[0][:len(f[0])-1] {
		if f[39][i] != f[0][i] {
			t.Fatalf("dot %d moved before the displacement", i)
		}
		if dy := float64(f[45][i].YDeg - f[0][i].YDeg); math.Abs(dy-0.7) > 1e-5 || f[45][i].XDeg != f[0][i].XDeg {
			t.Fatalf("dot %d was displaced by %v", i, dy)
		}
	}
}
