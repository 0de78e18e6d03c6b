package display_test

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"distal/experiments/display"
)

// turn is the difference of two phases in radians, −π to π.
func turn(a, b float32) float64 { return math.Remainder(float64(b)-float64(a), 2*math.Pi) }

func TestGratingDrift(t *testing.T) {
	t.Parallel()
	k, v := values(t, "grating", map[string]any{"direction_deg": 30.0, "spatial_frequency_cpd": 2, "temporal_frequency_hz": 6})
	d := k.New(v)
	f := lists(t, d, display.Trial{Values: v, Seed: 1, IntervalMs: frameMs}, 100)
	for i := 1; i < len(f); i++ {
		p := f[i].Patches[0]
		// A falling phase moves the bars along OrientationDeg: 6 Hz is a tenth of a period a frame at 60 Hz.
		if step := turn(f[i-1].Patches[0].PhaseRad, p.PhaseRad); math.Abs(step+2*math.Pi/10) > 1e-5 {
			t.Fatalf("frame %d: phase step %.6f, want %.6f", i, step, -2*math.Pi/10)
		}
		if p.OrientationDeg != 30 || p.Contrast != 0.5 {
			t.Fatalf("frame %d: %+v", i, p)
		}
	}
	if got := truths(d)["speed_deg_per_s"]; got != 3 {
		t.Errorf("speed %v, want 6 Hz / 2 c/deg = 3 deg/s", got)
	}
	// After a whole number of periods (1 s) the phase is back, without drift by rounding.
	if back := turn(f[0].Patches[0].PhaseRad, f[60].Patches[0].PhaseRad); math.Abs(back) > 1e-6 {
		t.Errorf("after 1 s the phase is off by %v rad", back)
	}
}

// A counterphase grating is the sum of two gratings of half the contrast that
// drift apart: cos(a)·sin(b) = ½ sin(b − a) + ½ sin(b + a).
func TestGratingCounterphase(t *testing.T) {
	t.Parallel()
	k, v := values(t, "grating", map[string]any{"motion": "counterphase", "temporal_frequency_hz": 5, "phase_deg": 40.0, "contrast": 0.8})
	for i, l := range lists(t, k.New(v), display.Trial{Values: v, IntervalMs: frameMs}, 30) {
		p := l.Patches[0]
		a := 2 * math.Pi * 5 * float64(i) / 60
		for _, x := range []float64{0, 0.13, 0.4, 0.77} {
			b := 2*math.Pi*x + 40*math.Pi/180
			want := 0.4*math.Sin(b-a) + 0.4*math.Sin(b+a)
			got := float64(p.Contrast) * math.Sin(2*math.Pi*x+float64(p.PhaseRad))
			if math.Abs(got-want) > 1e-6 {
				t.Fatalf("frame %d at %v deg: %.7f, want %.7f", i, x, got, want)
			}
		}
	}
}

// Sampled motion with steps of a quarter period and a sign that alternates
// equals steps of a quarter period the other way: a quarter back is three
// quarters on, and half a period is a change of sign (Anstis 1970).
func TestGratingReversedSteps(t *testing.T) {
	t.Parallel()
	k, v := values(t, "grating", map[string]any{"sample_ms": 100.0, "temporal_frequency_hz": 2.5, "contrast_reversal": 1, "phase_deg": 10.0})
	f := lists(t, k.New(v), display.Trial{Values: v, IntervalMs: frameMs}, 60)
	for i := 6; i < len(f); i++ {
		a, b := f[i-6].Patches[0], f[i].Patches[0]
		if a.Contrast != -b.Contrast {
			t.Fatalf("frame %d: contrast %v after %v", i, b.Contrast, a.Contrast)
		}
		forward := turn(a.PhaseRad, b.PhaseRad)      // −π/2
		seen := turn(a.PhaseRad, b.PhaseRad+math.Pi) // with the change of sign as half a period
		if math.Abs(forward+math.Pi/2) > 1e-5 || math.Abs(seen-math.Pi/2) > 1e-5 {
			t.Fatalf("frame %d: step %v, seen as %v", i, forward, seen)
		}
	}
	for i := 1; i < 6; i++ {
		if f[i].Patches[0] != f[0].Patches[0] {
			t.Fatalf("frame %d: the pattern moved between samples", i)
		}
	}
}

// Velocities of plaids: solved for linear equations and, independently, in closed form.
func TestPlaidVelocities(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../testdata/plaid_examples.json")
	if err != nil {
		t.Fatal(err)
	}
	type component struct {
		Direction float64 `json:"direction_deg"`
		Speed     float64 `json:"speed"`
	}
	var examples []struct {
		Name   string    `json:"name"`
		First  component `json:"component1"`
		Second component `json:"component2"`
		X      float64   `json:"ioc_vx"`
		Y      float64   `json:"ioc_vy"`
		SumX   float64   `json:"vector_sum_vx"`
		SumY   float64   `json:"vector_sum_vy"`
	}
	if err := json.Unmarshal(text, &examples); err != nil {
		t.Fatal(err)
	}
	if len(examples) < 6 {
		t.Fatal("examples are missing")
	}
	const tolerance = 2e-9 // the examples have ten digits
	for _, e := range examples {
		directions, speeds := []float64{e.First.Direction, e.Second.Direction}, []float64{e.First.Speed, e.Second.Speed}
		x, y, residual := display.IntersectConstraints(directions, speeds)
		if math.Abs(x-e.X) > tolerance || math.Abs(y-e.Y) > tolerance || residual > tolerance {
			t.Errorf("%s: constraints (%v, %v), want (%v, %v)", e.Name, x, y, e.X, e.Y)
		}
		x, y = display.SumVectors(directions, speeds)
		if math.Abs(x-e.SumX) > tolerance || math.Abs(y-e.SumY) > tolerance {
			t.Errorf("%s: sum (%v, %v), want (%v, %v)", e.Name, x, y, e.SumX, e.SumY)
		}
	}
}

// The frames of a plaid move rigidly with the velocity of the intersection of
// constraints: shifting the first frame by it gives every later frame.
func TestPlaidMovesRigidly(t *testing.T) {
	t.Parallel()
	k, v := values(t, "plaid", map[string]any{"direction_deg": 25.0})
	i := k.Index("component_directions_deg")
	v[i] = []float64{48.2, 70.5}
	v[k.Index("spatial_frequencies_cpd")] = []float64{1.5, 2}
	v[k.Index("temporal_frequencies_hz")] = []float64{1.5 * 0.6665324702, 2 * 0.3338068592}
	d := k.New(v)
	f := lists(t, d, display.Trial{Values: v, Seed: 3, IntervalMs: frameMs}, 60)
	truth := truths(d)
	if math.Abs(truth["constraints_direction_deg"]-25) > 1e-6 || math.Abs(truth["constraints_speed_deg_per_s"]-1) > 1e-8 {
		t.Fatalf("pattern velocity: %v", truth)
	}
	light := func(l *display.List, x, y float64) float64 {
		sum := 0.0
		for _, p := range l.Patches {
			sin, cos := math.Sincos(float64(p.OrientationDeg) * math.Pi / 180)
			sum += float64(p.Contrast) * math.Sin(2*math.Pi*float64(p.SpatialFrequencyCPD)*(x*cos+y*sin)+float64(p.PhaseRad))
		}
		return sum
	}
	sin, cos := math.Sincos(25 * math.Pi / 180)
	for n := range f {
		moved := float64(n) / 60
		for _, at := range [][2]float64{{0, 0}, {0.4, -0.3}, {-1.1, 0.7}} {
			want := light(f[0], at[0], at[1])
			if got := light(f[n], at[0]+moved*cos, at[1]+moved*sin); math.Abs(got-want) > 1e-5 {
				t.Fatalf("frame %d: %v, want %v", n, got, want)
			}
		}
	}
}

func TestPlaidRefusesParallelComponents(t *testing.T) {
	t.Parallel()
	k, v := values(t, "plaid", nil)
	v[k.Index("component_directions_deg")] = []float64{20, 200}
	var keys []string
	k.Check(v, func(key, _ string) { keys = append(keys, key) })
	if len(keys) != 1 || keys[0] != "component_directions_deg" {
		t.Errorf("problems: %v", keys)
	}
}
