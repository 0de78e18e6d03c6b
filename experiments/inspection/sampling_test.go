package inspection_test

import (
	"encoding/csv"
	"math"
	"os"
	"slices"
	"strconv"
	"testing"

	"distal/experiments/display"
	"distal/experiments/inspection"
)

// Tabulated from half a period a frame.
func TestMaxSpeed(t *testing.T) {
	t.Parallel()
	f, err := os.Open("../../testdata/aliasing_limits.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil || len(rows) < 7 {
		t.Fatal(err, len(rows))
	}
	for _, row := range rows[1:] {
		var x [5]float64
		for i := range x {
			if x[i], err = strconv.ParseFloat(row[i], 64); err != nil {
				t.Fatal(err)
			}
		}
		if got := inspection.MaxSpeed(x[0], x[1]); math.Abs(got-x[4]) > 1e-9 {
			t.Errorf("%v c/deg at %v Hz: %v, want %v", x[0], x[1], got, x[4])
		}
	}
}

func measure(t *testing.T, kind string, set map[string]float64, refreshHz, pxPerDeg float64) inspection.Sampling {
	t.Helper()
	k := display.FindKind(kind)
	v := k.Defaults()
	for key, x := range set {
		v[k.Index(key)] = []float64{x}
	}
	screen := inspection.NewScreen(30, 20, pxPerDeg, 0.5)
	return inspection.MeasureSampling(k, v, display.Trial{Seed: 3, IntervalMs: 1000 / refreshHz}, screen, 20)
}

func codes(m inspection.Sampling) (out []string) {
	for _, w := range m.Warnings {
		out = append(out, w.Code)
	}
	return out
}

// Each doubt just on either side of its limit.
func TestSamplingWarnings(t *testing.T) {
	t.Parallel()
	tests := []struct {
		name, kind string
		set        map[string]float64
		px         float64
		want       []string
	}{
		// At 60 Hz half a period a frame is 30 Hz.
		{"Fine", "grating", map[string]float64{"temporal_frequency_hz": 29.9}, 40, nil},
		{"HalfAPeriod", "grating", map[string]float64{"temporal_frequency_hz": 30}, 40, []string{"aliasing"}},
		{"BeyondAPeriod", "grating", map[string]float64{"temporal_frequency_hz": 70}, 40, []string{"aliasing"}},
		{"ThinBars", "grating", map[string]float64{"spatial_frequency_cpd": 10.1}, 40, []string{"small_element"}},
		{"LargeField", "grating", map[string]float64{"width_deg": 30.2}, 40, []string{"large_field"}},
		{"DotsFine", "fields", map[string]float64{"field_directions_deg": 0}, 40, nil},
		{"DotsJump", "fields", map[string]float64{"field_directions_deg": 0, "speeds_deg_per_s": 40}, 40, []string{"jump"}},
		{"DotsSmallStep", "fields", map[string]float64{"field_directions_deg": 0, "speeds_deg_per_s": 0.15}, 40, []string{"small_step"}},
		{"DotsSmall", "fields", map[string]float64{"field_directions_deg": 0, "dot_diameter_deg": 0.049}, 40, []string{"small_element"}},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			if got := codes(measure(t, tt.kind, tt.set, 60, tt.px)); !slices.Equal(got, tt.want) {
				t.Errorf("warnings %v, want %v", got, tt.want)
			}
		})
	}
}

// The measured steps are those of the definition.
func TestMeasuredSteps(t *testing.T) {
	t.Parallel()
	if got := measure(t, "grating", map[string]float64{"temporal_frequency_hz": 45}, 60, 40).StepPeriods; math.Abs(got-0.75) > 1e-5 {
		t.Errorf("45 Hz at 60 Hz: %v periods a frame, want 0.75", got)
	}
	m := measure(t, "fields", map[string]float64{"field_directions_deg": 0, "speeds_deg_per_s": 6}, 60, 40)
	if math.Abs(m.StepDeg-0.1) > 1e-5 || math.Abs(m.ElementPx-6) > 0.01 {
		t.Errorf("steps of %v deg, elements of %v px, want 0.1 and 0.15 × 40", m.StepDeg, m.ElementPx)
	}
}

// The motion that is really in the frames of each display points the way its
// parameters say: raster, cut along the direction, energy.
func TestEnergyOfDisplays(t *testing.T) {
	t.Parallel()
	tests := []struct {
		name, kind string
		set        map[string]float64
		low, high  float64
	}{
		{"Grating", "grating", nil, 0.4, 1},
		{"GratingLeft", "grating", map[string]float64{"direction_deg": 180}, -1, -0.4},
		{"Counterphase", "grating", map[string]float64{"motion": 1}, -0.1, 0.1},
		// Steps of a quarter period with contrast that alternates: the energy reverses (Anstis 1970).
		{"ReversedSteps", "grating", map[string]float64{"sample_ms": 50, "temporal_frequency_hz": 5, "contrast_reversal": 1}, -1, -0.15},
		{"QuarterSteps", "grating", map[string]float64{"sample_ms": 50, "temporal_frequency_hz": 5}, 0.15, 1},
		{"Dots", "dots", map[string]float64{"coherence": 1, "density_per_deg2": 8}, 0.15, 1},
		{"NoDots", "dots", map[string]float64{"coherence": 0, "density_per_deg2": 8}, -0.15, 0.15},
		{"OpposedFields", "fields", nil, -0.2, 0.2},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			k := display.FindKind(tt.kind)
			v := k.Defaults()
			for key, x := range tt.set {
				v[k.Index(key)] = []float64{x}
			}
			if got := netEnergy(k, v, 1); got < tt.low || got > tt.high {
				t.Errorf("net energy %.3f, want %v to %v", got, tt.low, tt.high)
			}
		})
	}
}

// netEnergy cuts a second of a display at 60 Hz along 16 horizontal lines.
func netEnergy(k *display.Kind, v display.Values, frequency float64) float64 {
	const lines = 16
	r := inspection.NewRaster(inspection.NewScreen(8, 8, 16, 0.5))
	d := k.New(v)
	l := display.NewList(d.Size())
	d.Begin(display.Trial{Values: v, Seed: 3, IntervalMs: 1000.0 / 60})
	var pictures [lines]inspection.SpaceTime
	for n := range 60 {
		l.Reset()
		d.Step(min(n, 1), l)
		r.Draw(l)
		for i := range pictures {
			p := &pictures[i]
			p.StepDeg, p.IntervalMs = 0.1, 1000.0/60
			p.Light = append(p.Light, r.Cut(0, 0.35*(float64(i)-7.5), 0, 0.1, 60))
		}
	}
	var e inspection.Energy
	for i := range pictures {
		e = e.Add(inspection.MotionEnergy(pictures[i], frequency))
	}
	return e.Net()
}
