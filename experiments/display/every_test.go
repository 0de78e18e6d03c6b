package display_test

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/display"
)

// drawValues draws parameters of a kind from their ranges, kept to sizes and
// numbers that a study could use, until the kind's own check accepts them.
func drawValues(t *rapid.T, k *display.Kind) display.Values {
	for range 100 {
		v := k.Defaults()
		for i, p := range k.Params {
			if !rapid.Bool().Draw(t, "set "+p.Key) {
				continue
			}
			switch p.Type {
			case display.Choice:
				v[i][0] = float64(rapid.IntRange(0, len(p.Options)-1).Draw(t, p.Key))
			case display.Boolean:
				v[i][0] = float64(rapid.IntRange(0, 1).Draw(t, p.Key))
			case display.Integer:
				v[i][0] = float64(rapid.IntRange(int(p.Min), int(min(p.Max, 60))).Draw(t, p.Key))
			default:
				for j := range v[i] {
					v[i][j] = rapid.Float64Range(p.Min, p.Max).Draw(t, p.Key)
				}
			}
		}
		if valid(k, v) {
			return v
		}
	}
	return k.Defaults()
}

func valid(k *display.Kind, v display.Values) bool {
	ok := true
	if k.Check != nil {
		k.Check(v, func(string, string) { ok = false })
	}
	return ok
}

// Whatever the parameters, every display keeps to the room that it declared,
// gives finite numbers, and repeats its frames bit for bit; a late frame leaves
// everything after it as it would have been.
func TestEveryDisplay(t *testing.T) {
	t.Parallel()
	for _, k := range display.Kinds() {
		t.Run(k.Name, func(t *testing.T) {
			t.Parallel()
			if !valid(k, k.Defaults()) {
				t.Fatal("the defaults contradict each other")
			}
			rapid.Check(t, func(rt *rapid.T) {
				v := drawValues(rt, k)
				trial := display.Trial{
					Values: v, Seed: rapid.Uint64().Draw(rt, "seed"), Number: 7, XDeg: 1, YDeg: -2,
					IntervalMs: rapid.SampledFrom([]float64{1000.0 / 60, 1000.0 / 144}).Draw(rt, "interval"),
				}
				d := k.New(v)
				want := lists(rt, d, trial, 24)
				again := lists(rt, k.New(v), trial, 24)
				for i := range want {
					if !same(want[i], again[i]) {
						rt.Fatalf("frame %d differs between two displays with the same seed", i)
					}
				}
				l := display.NewList(d.Size())
				d.Begin(trial)
				d.Step(0, l)
				l.Reset()
				d.Step(20, l)
				l.Reset()
				d.Step(3, l)
				if !same(l, want[23]) {
					rt.Fatal("late frames change what follows")
				}
				d.Truths(func(name string, x float64) {
					if math.IsNaN(x) || math.IsInf(x, 0) || name == "" {
						rt.Fatalf("truth %q is %v", name, x)
					}
				})
			})
		})
	}
}

func same(a, b *display.List) bool {
	return slices.Equal(a.Dots, b.Dots) && slices.Equal(a.Patches, b.Patches) && slices.Equal(a.Batches, b.Batches)
}

// lists runs a display for n frames and returns each frame's list.
func lists(t interface{ Fatalf(string, ...any) }, d display.Display, trial display.Trial, n int) []*display.List {
	dots, patches, batches := d.Size()
	d.Begin(trial)
	var out []*display.List
	for i := range n {
		l := display.NewList(dots, patches, batches)
		d.Step(min(i, 1), l)
		if len(l.Dots) > dots || len(l.Patches) > patches || len(l.Batches) > batches {
			t.Fatalf("frame %d: %d dots, %d patches and %d batches exceed %d, %d and %d", i, len(l.Dots), len(l.Patches), len(l.Batches), dots, patches, batches)
		}
		checkFinite(t, l)
		out = append(out, l)
	}
	return out
}

func checkFinite(t interface{ Fatalf(string, ...any) }, l *display.List) {
	finite := func(x ...float32) {
		for _, x := range x {
			if x-x != 0 {
				t.Fatalf("a number is not finite")
			}
		}
	}
	for _, d := range l.Dots {
		finite(d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast)
		if !(d.DiameterDeg > 0) || d.Contrast < -1 {
			t.Fatalf("impossible dot: %+v", d)
		}
	}
	for _, p := range l.Patches {
		finite(p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD, p.PhaseRad, p.Contrast, p.RampDeg)
		if !(p.WidthDeg > 0 && p.HeightDeg > 0) || p.RampDeg < 0 {
			t.Fatalf("impossible patch: %+v", p)
		}
	}
}

// truths collects what a display reports of a trial.
func truths(d display.Display) map[string]float64 {
	out := map[string]float64{}
	d.Truths(func(name string, x float64) { out[name] = x })
	return out
}

// BenchmarkEveryDisplay measures a frame of each display with its defaults.
func BenchmarkEveryDisplay(b *testing.B) {
	for _, k := range display.Kinds() {
		b.Run(k.Name, func(b *testing.B) {
			v := k.Defaults()
			d := k.New(v)
			l := display.NewList(d.Size())
			d.Begin(display.Trial{Values: v, Seed: 1, IntervalMs: frameMs})
			b.ReportAllocs()
			for b.Loop() {
				l.Reset()
				d.Step(1, l)
			}
			items := max(1, len(l.Dots)+len(l.Patches))
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(items), "ns/item")
		})
	}
}
