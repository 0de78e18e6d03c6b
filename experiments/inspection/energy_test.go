package inspection_test

import (
	"encoding/csv"
	"encoding/json"
	"math"
	"os"
	"strconv"
	"testing"

	"distal/experiments/inspection"
)

// Tabulated from the closed form.
func TestTemporalFilter(t *testing.T) {
	t.Parallel()
	f, err := os.Open("../../testdata/motion_energy_temporal_filter.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil || len(rows) < 40 {
		t.Fatal(err, len(rows))
	}
	for _, row := range rows[1:] {
		var x [3]float64
		for i := range x {
			if x[i], err = strconv.ParseFloat(row[i], 64); err != nil {
				t.Fatal(err)
			}
		}
		for i, n := range []int{3, 5} {
			if got := inspection.TemporalFilter(n, 100, x[0]); math.Abs(got-x[1+i]) > 1e-8 {
				t.Errorf("order %d at %v s: %.9f, want %.9f", n, x[0], got, x[1+i])
			}
		}
	}
	// The integral vanishes: no answer to steady light.
	for _, n := range []int{3, 5} {
		sum := 0.0
		for i := range 20000 {
			sum += inspection.TemporalFilter(n, 100, float64(i)*5e-5) * 5e-5
		}
		if math.Abs(sum) > 1e-9 {
			t.Errorf("order %d: integral %v", n, sum)
		}
	}
}

// Means in closed form: a² ωτ/(1 + ω²τ²) sin(2π Δφ/λ).
func TestCorrelator(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../testdata/reichardt_examples.json")
	if err != nil {
		t.Fatal(err)
	}
	var file struct {
		Examples []struct {
			Tau        float64 `json:"tau_s"`
			Frequency  float64 `json:"temporal_frequency_hz"`
			Separation float64 `json:"sensor_separation_deg"`
			Wavelength float64 `json:"wavelength_deg"`
			Amplitude  float64 `json:"amplitude"`
			Mean       float64 `json:"mean_output"`
		}
	}
	if err := json.Unmarshal(text, &file); err != nil || len(file.Examples) < 6 {
		t.Fatal(err, len(file.Examples))
	}
	for _, e := range file.Examples {
		// 2000 samples a period, two seconds or more to settle, whole periods for the mean.
		const perPeriod = 2000
		skip := perPeriod * int(math.Ceil(2*e.Frequency))
		n := skip + 10*perPeriod
		a, b := make([]float64, n), make([]float64, n)
		for i := range a {
			phase := 2 * math.Pi * float64(i) / perPeriod
			a[i] = e.Amplitude * math.Sin(phase)
			b[i] = e.Amplitude * math.Sin(phase-2*math.Pi*e.Separation/e.Wavelength)
		}
		got := inspection.Correlator(a, b, 1000/e.Frequency/perPeriod, 1000*e.Tau, skip)
		// Straight lines between samples are off by (2π/2000)²/12 of the amplitude.
		if math.Abs(got-e.Mean) > 2e-6 {
			t.Errorf("%+v: %.8f", e, got)
		}
	}
}

// drift is a space-time picture of a grating.
func drift(frequency, speed, hz float64, frames int) inspection.SpaceTime {
	p := inspection.SpaceTime{StepDeg: 0.05, IntervalMs: 1000 / hz}
	for n := range frames {
		row := make([]float64, 160)
		for i := range row {
			row[i] = 1 + 0.5*math.Sin(2*math.Pi*frequency*(float64(i)*p.StepDeg-speed*float64(n)/hz))
		}
		p.Light = append(p.Light, row)
	}
	return p
}

// netOfDrift is the net energy of a drifting grating at the filters' own spatial
// frequency in closed form. The filters' transforms are z⁻⁽ⁿ⁺¹⁾ − z⁻⁽ⁿ⁺³⁾ with z = 1 + iω/k, so that slow over fast is
// z⁻²: magnitude m = cos²φ and phase −2φ with φ = atan(ω/k), and net = 2 m sin 2φ / (1 + m²).
func netOfDrift(hz float64) float64 {
	phi := math.Atan(2 * math.Pi * hz / 100)
	m := math.Cos(phi) * math.Cos(phi)
	return 2 * m * math.Sin(2*phi) / (1 + m*m)
}

// A drifting grating has its energy in its direction, as much as theory says.
func TestEnergyOfDrift(t *testing.T) {
	t.Parallel()
	for _, hz := range []float64{2, 4, 8} {
		for _, sign := range []float64{1, -1} {
			// At 240 Hz it matters little that frames are held. Onset and ends of the cut cost 0.03 at most.
			if got, want := inspection.MotionEnergy(drift(1, sign*hz, 240, 480), 1).Net(), sign*netOfDrift(hz); math.Abs(got-want) > 0.03 {
				t.Errorf("%v Hz: net energy %.3f, want %.3f", sign*hz, got, want)
			}
		}
	}
}

// At 20 Hz a grating of 1 c/deg moves half a period a frame at 10 deg/s: beyond,
// its energy points the other way, just as that of the alias does. Without motion, and in counterphase, there is none.
func TestEnergyReversesBeyondHalfAPeriod(t *testing.T) {
	t.Parallel()
	for _, speed := range []float64{3, 6, 8} {
		below, beyond := inspection.MotionEnergy(drift(1, speed, 20, 60), 1).Net(), inspection.MotionEnergy(drift(1, 20-speed, 20, 60), 1).Net()
		if below < 0.2 || math.Abs(below+beyond) > 0.01 {
			// The cut's two ends differ in phase, which costs up to 0.01.
			t.Errorf("%v deg/s: net energy %.6f, its alias %.6f", speed, below, beyond)
		}
	}
	if got := inspection.MotionEnergy(drift(1, 10, 20, 60), 1).Net(); math.Abs(got) > 0.01 {
		t.Errorf("half a period a frame: net energy %.3g", got)
	}
	a, b := drift(1, 8, 60, 90), drift(1, -8, 60, 90)
	for n := range a.Light {
		for i := range a.Light[n] {
			a.Light[n][i] = (a.Light[n][i] + b.Light[n][i]) / 2
		}
	}
	if got := inspection.MotionEnergy(a, 1).Net(); math.Abs(got) > 0.02 {
		t.Errorf("counterphase: net energy %.3f", got)
	}
}

// The elaborated detector agrees in sign with motion energy.
func TestElaboratedDetector(t *testing.T) {
	t.Parallel()
	for _, speed := range []float64{2, 4, 8} {
		forward, backward := inspection.ElaboratedDetector(drift(1, speed, 60, 120), 1, 35), inspection.ElaboratedDetector(drift(1, -speed, 60, 120), 1, 35)
		if forward < 0.1 || math.Abs(forward+backward) > 0.05 {
			t.Errorf("%v deg/s: %.3f and %.3f", speed, forward, backward)
		}
	}
}
