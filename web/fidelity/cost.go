package fidelity

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/value"
)

// Cost is what the frames of a study cost at 1920 × 1080.
type Cost struct {
	Study    string
	MainMs   []float64 // main thread, a frame: engine and drawing calls
	RasterMs []float64 // renderer, a frame
	Dots     int
	Patches  int
}

// Quantile is the value below which the share p of x lies.
func Quantile(x []float64, p float64) float64 {
	if len(x) == 0 {
		return math.NaN()
	}
	sorted := slices.Sorted(slices.Values(x))
	return sorted[min(len(sorted)-1, int(p*float64(len(sorted))))]
}

// FrameCost plays the first trial of a library study in the browser.
func (b *Bench) FrameCost(name string, frames int) (Cost, error) {
	cost := Cost{Study: name}
	study, problems := library.Read(name)
	if problems.Failed() {
		return cost, fmt.Errorf("study %s: %w", name, problems)
	}
	screen := rehearsal.DefaultScreen()
	screen.SkipDisplays = true
	observer := rehearsal.Observer{Threshold: 10, Slope: 3, AgeYears: 30}
	records, err := rehearsal.Observe(study, run.Assignment{Seed: 1}, observer, screen, "fidelity", 1.7e12)
	if err != nil {
		return cost, fmt.Errorf("study %s: %w", name, err)
	}
	var wire []json.RawMessage
	for _, r := range records[:min(len(records), 40)] {
		text, err := value.Canonical(r.Encode())
		if err != nil {
			return cost, err
		}
		wire = append(wire, text)
	}
	text, err := value.Canonical(study.Encode())
	if err != nil {
		return cost, err
	}
	geometry := map[string]any{"devicePxPerMm": screen.PxPerMm, "distanceMm": screen.DistanceMm, "backgroundFraction": study.Screen.BackgroundFraction, "gamma": nil}
	var got struct {
		Main    []float64 `json:"main"`
		Raster  []float64 `json:"raster"`
		Dots    int       `json:"dots"`
		Patches int       `json:"patches"`
	}
	err = b.call(&got, "frameCost", "/engine.wasm", string(text), wire, frames, geometry)
	cost.MainMs, cost.RasterMs, cost.Dots, cost.Patches = got.Main, got.Raster, got.Dots, got.Patches
	return cost, err
}
