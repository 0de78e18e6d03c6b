package display_test

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/display"
)

const frameMs = 1000.0 / 60

// values gives a kind's defaults with some set: numbers, or option names of choices.
func values(t testing.TB, kind string, set map[string]any) (*display.Kind, display.Values) {
	t.Helper()
	k := display.FindKind(kind)
	v := k.Defaults()
	for key, x := range set {
		i := k.Index(key)
		if i < 0 {
			t.Fatalf("%s has no parameter %s", kind, key)
		}
		switch x := x.(type) {
		case string:
			v[i][0] = float64(slices.Index(k.Params[i].Options, x))
		case float64:
			v[i][0] = x
		case int:
			v[i][0] = float64(x)
		}
	}
	return k, v
}

// frames runs a display for n frames and returns a copy of each frame's dots.
func frames(d display.Display, t display.Trial, n int) [][]display.Dot {
	dots, patches, batches := d.Size()
	l := display.NewList(dots, patches, batches)
	d.Begin(t)
	var out [][]display.Dot
	for i := range n {
		l.Reset()
		d.Step(min(i, 1), l)
		out = append(out, slices.Clone(l.Dots))
	}
	return out
}

// The noise rules by their definitions (Scase, Braddick and Raymond 1996):
// displacement of every dot that stayed inside, over successive frames.
func TestNoiseRules(t *testing.T) {
	t.Parallel()
	const step = 6.0 / 60 // deg per frame at 6 deg/s
	tests := []struct {
		name        string
		noise       string
		sameLength  bool    // every step has the length of a signal step
		correlation float64 // of a dot's direction with its direction a frame later
	}{
		{"RandomPosition", "random_position", false, math.NaN()},
		{"RandomWalk", "random_walk", true, 0},
		{"RandomDirection", "random_direction", true, 1},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			k, v := values(t, "dots", map[string]any{
				"coherence": 0.0, "speed_deg_per_s": 6, "density_per_deg2": 6, "width_deg": 10, "noise": tt.noise,
			})
			f := frames(k.New(v), display.Trial{Values: v, Seed: 5, IntervalMs: frameMs}, 60)
			kept, all, correlation, pairs := 0, 0, 0.0, 0
			for n := 2; n < len(f); n++ {
				for i := range f[n] {
					ax, ay := float64(f[n-1][i].XDeg-f[n-2][i].XDeg), float64(f[n-1][i].YDeg-f[n-2][i].YDeg)
					bx, by := float64(f[n][i].XDeg-f[n-1][i].XDeg), float64(f[n][i].YDeg-f[n-1][i].YDeg)
					all++
					if math.Abs(math.Hypot(bx, by)-step) < 1e-5 {
						kept++
						if math.Abs(math.Hypot(ax, ay)-step) < 1e-5 {
							correlation += (ax*bx + ay*by) / (step * step)
							pairs++
						}
					}
				}
			}
			share := float64(kept) / float64(all)
			if tt.sameLength && share < 0.95 || !tt.sameLength && share > 0.01 {
				t.Errorf("%.3f of the steps have the signal's length", share)
			}
			if !math.IsNaN(tt.correlation) {
				if got := correlation / float64(pairs); math.Abs(got-tt.correlation) > 0.02 {
					t.Errorf("direction correlation %.4f, want %v", got, tt.correlation)
				}
			}
		})
	}
}

// With signal dots drawn anew each step a dot stays signal with probability
// coherence, with the same dots always (Scase et al. 1996); their number is
// round(c n), or binomial with variance n c (1 − c).
func TestSignalDots(t *testing.T) {
	t.Parallel()
	const step = 6.0 / 60
	moved := func(set map[string]any) (survival, mean, variance float64, n int) {
		all := map[string]any{"coherence": 0.3, "speed_deg_per_s": 6, "density_per_deg2": 4, "width_deg": 10, "reentry": "random"}
		for key, x := range set {
			all[key] = x
		}
		k, v := values(t, "dots", all)
		f := frames(k.New(v), display.Trial{Values: v, Seed: 9, IntervalMs: frameMs}, 400)
		var counts []float64
		stay, was := 0, 0
		var before []bool
		for i := 1; i < len(f); i++ {
			now := make([]bool, len(f[i]))
			count := 0.0
			for j := range f[i] {
				dx, dy := float64(f[i][j].XDeg-f[i-1][j].XDeg), float64(f[i][j].YDeg-f[i-1][j].YDeg)
				now[j] = math.Abs(dx-step) < 1e-5 && math.Abs(dy) < 1e-5
				if now[j] {
					count++
				}
				if before != nil && before[j] {
					was++
					if now[j] {
						stay++
					}
				}
			}
			counts = append(counts, count)
			before = now
		}
		for _, c := range counts {
			mean += c / float64(len(counts))
		}
		for _, c := range counts {
			variance += (c - mean) * (c - mean) / float64(len(counts)-1)
		}
		return float64(stay) / float64(was), mean, variance, len(f[0])
	}

	// Some signal dots re-enter at each step, which hides about
	// step·4/(π·width) = 1.3 % of the signal steps; tolerances allow for it.
	same, mean, _, n := moved(nil)
	if same < 0.97 || math.Abs(mean/float64(n)-0.3) > 0.012 {
		t.Errorf("same dots: survival %.3f, share %.3f", same, mean/float64(n))
	}
	redrawn, mean, _, n := moved(map[string]any{"signal_dots": "redrawn"})
	if math.Abs(redrawn-0.3) > 0.012 || math.Abs(mean/float64(n)-0.3) > 0.012 {
		t.Errorf("redrawn dots: survival %.3f, share %.3f", redrawn, mean/float64(n))
	}
	_, mean, variance, n := moved(map[string]any{"signal_dots": "redrawn", "signal_count": "binomial"})
	want := float64(n) * 0.3 * 0.7
	if math.Abs(mean/float64(n)-0.3) > 0.015 || math.Abs(variance/want-1) > 0.25 {
		t.Errorf("binomial: share %.3f, variance %.1f, want %.1f", mean/float64(n), variance, want)
	}
}

// Three interleaved sets: each is drawn in every third frame and then has moved
// speed × 3/refresh, 0.25 deg at 5 deg/s and 60 Hz (Britten et al. 1992).
func TestInterleavedSets(t *testing.T) {
	t.Parallel()
	k, v := values(t, "dots", map[string]any{"coherence": 1.0, "speed_deg_per_s": 5, "interleaved_sets": 3, "width_deg": 10})
	f := frames(k.New(v), display.Trial{Values: v, Seed: 3, IntervalMs: frameMs}, 30)
	moved, all := 0, 0
	for n := 3; n < len(f); n++ {
		for i := range f[n] {
			all++
			if math.Abs(float64(f[n][i].XDeg-f[n-3][i].XDeg)-0.25) < 1e-5 {
				moved++
			}
		}
	}
	if share := float64(moved) / float64(all); share < 0.94 {
		t.Errorf("%.3f of the dots moved 0.25 deg in three frames", share)
	}
}

// Dots per frame for 16.7 dots deg⁻² s⁻¹ (Britten et al. 1992) at 60 Hz:
// 5.465 in an aperture of 5 deg, 21.86 in 10 deg.
func TestDensity(t *testing.T) {
	t.Parallel()
	for width, want := range map[float64]int{5: 5, 10: 22} {
		k, v := values(t, "dots", map[string]any{"density_per_deg2": 16.7 / 60, "width_deg": width})
		if got := len(frames(k.New(v), display.Trial{Values: v, Seed: 1, IntervalMs: frameMs}, 1)[0]); got != want {
			t.Errorf("%v deg: %d dots, want %d", width, got, want)
		}
	}
}

func TestLifetime(t *testing.T) {
	t.Parallel()
	k, v := values(t, "dots", map[string]any{"coherence": 1.0, "speed_deg_per_s": 3, "lifetime_ms": 100, "width_deg": 10, "density_per_deg2": 5})
	f := frames(k.New(v), display.Trial{Values: v, Seed: 2, IntervalMs: frameMs}, 121)
	jumps, steps := 0, 0
	for n := 1; n < len(f); n++ {
		for i := range f[n] {
			steps++
			if math.Abs(float64(f[n][i].XDeg-f[n-1][i].XDeg)-0.05) > 1e-5 {
				jumps++
			}
		}
	}
	// One step in six is a rebirth (100 ms = 6 frames); 0.6 % leave the aperture in a step.
	if share := float64(jumps) / float64(steps); math.Abs(share-1.0/6) > 0.012 {
		t.Errorf("%.4f of the steps are rebirths, want 1/6", share)
	}
}

// Whatever the parameters: the number of dots is constant, no dot leaves the
// aperture, the same seed gives the same frames, and a step of 2 equals two steps.
func TestDotsProperties(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(rt *rapid.T) {
		k, v := values(t, "dots", map[string]any{
			"coherence":          rapid.Float64Range(0, 1).Draw(rt, "coherence"),
			"direction_deg":      rapid.Float64Range(-180, 180).Draw(rt, "direction"),
			"speed_deg_per_s":    rapid.Float64Range(0, 60).Draw(rt, "speed"),
			"width_deg":          rapid.Float64Range(2, 12).Draw(rt, "width"),
			"height_deg":         rapid.Float64Range(2, 12).Draw(rt, "height"),
			"inner_diameter_deg": rapid.Float64Range(0.1, 1.9).Draw(rt, "inner"),
			"aperture":           rapid.SampledFrom([]string{"circle", "annulus", "rectangle"}).Draw(rt, "aperture"),
			"noise":              rapid.SampledFrom([]string{"random_position", "random_walk", "random_direction"}).Draw(rt, "noise"),
			"reentry":            rapid.SampledFrom([]string{"opposite", "random"}).Draw(rt, "reentry"),
			"signal_dots":        rapid.SampledFrom([]string{"same", "redrawn"}).Draw(rt, "signal"),
			"lifetime_ms":        rapid.SampledFrom([]float64{0, 80, 300}).Draw(rt, "lifetime"),
			"interleaved_sets":   rapid.IntRange(1, 4).Draw(rt, "sets"),
			"direction_sd_deg":   rapid.SampledFrom([]float64{0, 20}).Draw(rt, "bandwidth"),
		})
		trial := display.Trial{Values: v, Seed: rapid.Uint64().Draw(rt, "seed"), Number: 4, IntervalMs: frameMs}
		d := k.New(v)
		f := frames(d, trial, 40)
		for n := range f {
			if len(f[n]) != len(f[0]) {
				rt.Fatalf("frame %d has %d dots, the first %d", n, len(f[n]), len(f[0]))
			}
			for _, dot := range f[n] {
				checkInside(rt, k, v, dot)
			}
		}
		again := frames(k.New(v), trial, 40)
		for n := range f {
			if !slices.Equal(f[n], again[n]) {
				rt.Fatalf("frame %d differs between two displays with the same seed", n)
			}
		}
		l := display.NewList(4000, 0, 1)
		d.Begin(trial)
		d.Step(0, l)
		l.Reset()
		d.Step(39, l)
		if !slices.Equal(l.Dots, f[39]) {
			rt.Fatal("one step of 39 differs from 39 steps")
		}
	})
}

func checkInside(t *rapid.T, k *display.Kind, v display.Values, dot display.Dot) {
	const slack = 1e-5 // float32 rounding of positions
	x, y := float64(dot.XDeg), float64(dot.YDeg)
	r := math.Hypot(x, y)
	w := v.Num(k.Index("width_deg"))
	inside := r <= w/2+slack
	switch v.Choice(k.Index("aperture")) {
	case 1:
		inside = inside && r >= v.Num(k.Index("inner_diameter_deg"))/2-slack
	case 2:
		inside = math.Abs(x) <= w/2+slack && math.Abs(y) <= v.Num(k.Index("height_deg"))/2+slack
	}
	if !inside {
		t.Fatalf("a dot at (%v, %v) is outside its aperture", x, y)
	}
}

// Moving dots that re-enter opposite keep the density uniform: the mean squared
// radius of a uniform disc of radius R is R²/2.
func TestDensityStaysUniform(t *testing.T) {
	t.Parallel()
	k, v := values(t, "dots", map[string]any{"coherence": 1.0, "speed_deg_per_s": 20, "width_deg": 10, "density_per_deg2": 20})
	f := frames(k.New(v), display.Trial{Values: v, Seed: 8, IntervalMs: frameMs}, 300)
	sum, x := 0.0, 0.0
	last := f[299]
	for _, dot := range last {
		sum += float64(dot.XDeg*dot.XDeg + dot.YDeg*dot.YDeg)
		x += float64(dot.XDeg)
	}
	n := float64(len(last))
	// Standard error of the mean of r² is R²/√12/√n.
	if got, se := sum/n, 25/math.Sqrt(12*n); math.Abs(got-12.5) > 4*se {
		t.Errorf("mean squared radius %.3f, want 12.5 ± %.3f", got, se)
	}
	if se := 2.5 / math.Sqrt(n); math.Abs(x/n) > 4*se {
		t.Errorf("mean x %.3f, want 0 ± %.3f", x/n, se)
	}
}

func TestDisplaysDoNotAllocate(t *testing.T) {
	for _, kind := range display.Kinds() {
		v := kind.Defaults()
		d := kind.New(v)
		dots, patches, batches := d.Size()
		l := display.NewList(dots, patches, batches)
		d.Begin(display.Trial{Values: v, Seed: 1, IntervalMs: frameMs})
		if n := testing.AllocsPerRun(200, func() { l.Reset(); d.Step(1, l) }); n != 0 {
			t.Errorf("%s: %v allocations a frame", kind.Name, n)
		}
	}
}

func BenchmarkDots1000(b *testing.B) {
	k, v := values(b, "dots", map[string]any{"coherence": 0.3, "density_per_deg2": 10, "width_deg": 11.283792, "lifetime_ms": 200})
	d := k.New(v)
	l := display.NewList(4000, 0, 1)
	d.Begin(display.Trial{Values: v, Seed: 1, IntervalMs: frameMs})
	b.ReportAllocs()
	for b.Loop() {
		l.Reset()
		d.Step(1, l)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(l.Dots)), "ns/dot")
}
