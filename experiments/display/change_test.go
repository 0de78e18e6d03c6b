package display_test

import (
	"math"
	"testing"

	"distal/experiments/display"
)

// What participants can adjust, by display, with two settings. Places: nothing on
// the screen may be elsewhere, or in another phase, at the moment of the change.
var adjustable = []struct {
	kind, key string
	set       map[string]float64
	from, to  float64
	places    bool
}{
	{"dots", "speed_deg_per_s", nil, 3, 12, true},
	{"dots", "direction_deg", nil, 10, 100, true},
	{"dots", "coherence", nil, 0.2, 0.9, true},
	{"dots", "contrast", nil, 0.2, 0.9, true},
	{"dots", "dot_diameter_deg", nil, 0.1, 0.3, true},
	{"grating", "temporal_frequency_hz", nil, 2, 7, true},
	{"grating", "temporal_frequency_hz", map[string]float64{"sample_ms": 50}, 2, 7, true},
	{"grating", "contrast", nil, 0.2, 0.9, true},
	{"grating", "spatial_frequency_cpd", nil, 1, 2, true},
	{"grating", "direction_deg", nil, 0, 45, true},
	{"adaptation", "test_speed_deg_per_s", map[string]float64{"adapt_ms": 200, "test": 2, "test_contrast": 0.5}, -1, 2, true},
	{"adaptation", "test_speed_deg_per_s", map[string]float64{"adapt_ms": 200, "test": 2, "pattern": 1}, -1, 2, true},
	{"adaptation", "test_contrast", map[string]float64{"adapt_ms": 200}, 0.2, 0.7, true},
	// The target swings about a centre that stays: its place follows the velocity.
	{"induced", "target_speed_deg_per_s", map[string]float64{"path": 1}, 0.5, -1, false},
	{"induced", "target_contrast", nil, 0.5, 1, true},
	{"induced", "surround_contrast", nil, 0.5, 1, true},
}

func kindNamed(t *testing.T, name string) *display.Kind {
	t.Helper()
	for _, k := range display.Kinds() {
		if k.Name == name {
			return k
		}
	}
	t.Fatalf("there is no %s", name)
	return nil
}

// A change is no jump, and it is a change: soon the frames are others than without it.
func TestChangesWithoutJump(t *testing.T) {
	t.Parallel()
	for _, c := range adjustable {
		t.Run(c.kind+"/"+c.key, func(t *testing.T) {
			t.Parallel()
			kind := kindNamed(t, c.kind)
			i := kind.Index(c.key)
			begin := func() display.Display {
				v := kind.Defaults()
				for key, x := range c.set {
					v[kind.Index(key)] = []float64{x}
				}
				v[i] = []float64{c.from}
				d := kind.New(v)
				d.Begin(display.Trial{Values: v, Seed: 5, Number: 2, IntervalMs: 10})
				d.Step(0, display.NewList(d.Size()))
				d.Step(37, display.NewList(d.Size()))
				return d
			}
			d, same := begin(), begin()
			before, after := display.NewList(d.Size()), display.NewList(d.Size())
			d.Step(0, before)
			if !d.(display.Changer).Change(i, c.to) {
				t.Fatal("it cannot change")
			}
			d.Step(0, after)
			if c.places {
				samePlaces(t, before, after)
			}
			changed, unchanged := display.NewList(d.Size()), display.NewList(d.Size())
			d.Step(8, changed)
			same.Step(8, unchanged)
			if equalLists(changed, unchanged) {
				t.Error("nothing is shown of the change")
			}
		})
	}
}

func samePlaces(t *testing.T, a, b *display.List) {
	t.Helper()
	if len(a.Dots) != len(b.Dots) || len(a.Patches) != len(b.Patches) || len(a.Dots)+len(a.Patches) == 0 {
		t.Fatalf("%d and %d dots, %d and %d patches", len(a.Dots), len(b.Dots), len(a.Patches), len(b.Patches))
	}
	for i := range a.Dots {
		if a.Dots[i].XDeg != b.Dots[i].XDeg || a.Dots[i].YDeg != b.Dots[i].YDeg {
			t.Fatalf("dot %d jumps from %v to %v", i, a.Dots[i], b.Dots[i])
		}
	}
	for i := range a.Patches {
		p, q := a.Patches[i], b.Patches[i]
		turn := math.Remainder(float64(p.PhaseRad-q.PhaseRad), 2*math.Pi)
		if p.XDeg != q.XDeg || p.YDeg != q.YDeg || math.Abs(turn) > 1e-5 { // phases are float32
			t.Fatalf("patch %d jumps from %v to %v", i, p, q)
		}
	}
}

func equalLists(a, b *display.List) bool {
	if len(a.Dots) != len(b.Dots) || len(a.Patches) != len(b.Patches) {
		return false
	}
	for i := range a.Dots {
		if a.Dots[i] != b.Dots[i] {
			return false
		}
	}
	for i := range a.Patches {
		if a.Patches[i] != b.Patches[i] {
			return false
		}
	}
	return true
}

// What cannot change without a jump says so and stays as it is.
func TestUnchangeable(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		kind, key string
		set       map[string]float64
	}{
		{"dots", "density_per_deg2", nil},
		{"dots", "direction_deg", map[string]float64{"direction_sd_deg": 20}},
		{"grating", "width_deg", nil},
		{"grating", "temporal_frequency_hz", map[string]float64{"motion": 1}},
		{"adaptation", "adapt_ms", nil},
		{"induced", "surround_speed_deg_per_s", nil},
	} {
		kind := kindNamed(t, c.kind)
		v := kind.Defaults()
		for key, x := range c.set {
			v[kind.Index(key)] = []float64{x}
		}
		i := kind.Index(c.key)
		was := v[i][0]
		d := kind.New(v)
		d.Begin(display.Trial{Values: v, Seed: 5, IntervalMs: 10})
		if d.(display.Changer).Change(i, was+1) || v[i][0] != was {
			t.Errorf("%s of %s was changed", c.key, c.kind)
		}
	}
}
