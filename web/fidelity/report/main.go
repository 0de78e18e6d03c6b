// Command report measures what the participant's page shows and times in
// Chromium and writes index.html with pictures. Run it as ./deploy/fidelity.
package main

import (
	"context"
	_ "embed"
	"encoding/base64"
	"flag"
	"fmt"
	"html/template"
	"math"
	"os"
	"os/signal"
	"path/filepath"

	"distal/experiments/library"
	"distal/web/fidelity"
)

//go:embed report.html
var page string

// refreshMs is the refresh interval of headless Chromium.
const refreshMs = 1000.0 / 60

func main() {
	out := flag.String("o", ".distal/fidelity", "folder to write to")
	flag.Parse()
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	defer stop()
	if err := report(ctx, *out); err != nil {
		fmt.Fprintln(os.Stderr, "fidelity:", err)
		os.Exit(1)
	}
}

type grid struct {
	Canvas  fidelity.Canvas
	Discs   int
	WorstPx float64
	Picture template.URL
}

type agreement struct {
	fidelity.Agreement
	Percent float64
}

type trial struct {
	Planned, Presented, Intervals, Dropped int
	HoldMs, RTMs, PressedMs, ErrorMs       float64
}

type cost struct {
	Study                      string
	Dots, Patches              int
	MainMs, Main99Ms, RasterMs float64
	Raster99Ms                 float64
}

// figures is all that the report shows.
type figures struct {
	Renderer  string
	Grids     []grid
	Shifts    [][]fidelity.Shift
	Ramp      []fidelity.Level
	Agree     []agreement
	Trials    []trial
	Holds     []trial
	Responses []trial
	Costs     []cost
}

func report(ctx context.Context, out string) error {
	if err := os.MkdirAll(out, 0o755); err != nil {
		return err
	}
	b, err := fidelity.Open(ctx)
	if err != nil {
		return err
	}
	defer b.Close()
	var f figures
	for _, step := range []struct {
		name    string
		measure func(*fidelity.Bench, *figures) error
	}{
		{"grid of discs", grids}, {"small shifts", shifts}, {"contrast ramp", ramp}, {"reference raster", agree},
		{"phases", trials}, {"hold-ups", holds}, {"response times", responses}, {"cost of frames", costs},
	} {
		fmt.Println("measuring:", step.name)
		if err := step.measure(b, &f); err != nil {
			return fmt.Errorf("%s: %w", step.name, err)
		}
	}
	path := filepath.Join(out, "index.html")
	file, err := os.Create(path)
	if err != nil {
		return err
	}
	t := template.Must(template.New("report").Funcs(template.FuncMap{"percent": func(x float64) float64 { return 100 * x }}).Parse(page))
	if err := t.Execute(file, f); err != nil {
		return err
	}
	if err := file.Close(); err != nil {
		return err
	}
	fmt.Println("written:", path)
	return nil
}

func grids(b *fidelity.Bench, f *figures) error {
	for _, ratio := range fidelity.PixelRatios {
		discs, canvas, png, err := b.Grid(ratio)
		if err != nil {
			return err
		}
		g := grid{Canvas: canvas, Discs: len(discs), Picture: template.URL("data:image/png;base64," + base64.StdEncoding.EncodeToString(png))}
		for _, d := range discs {
			g.WorstPx = max(g.WorstPx, d.Worst())
		}
		f.Grids = append(f.Grids, g)
		f.Renderer = canvas.Renderer
	}
	return nil
}

func shifts(b *fidelity.Bench, f *figures) error {
	for _, diameter := range []float64{1, 0.1} {
		s, err := b.Shifts(diameter, 0.5)
		if err != nil {
			return err
		}
		f.Shifts = append(f.Shifts, s)
	}
	return nil
}

func ramp(b *fidelity.Bench, f *figures) (err error) {
	f.Ramp, err = b.Ramp(0)
	return err
}

func agree(b *fidelity.Bench, f *figures) error {
	small := fidelity.Setup{WidthCSSPx: 200, HeightCSSPx: 160, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.4}
	wide := fidelity.Setup{WidthCSSPx: 400, HeightCSSPx: 300, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.5}
	for _, set := range []struct {
		setup fidelity.Setup
		cases []fidelity.Case
	}{{small, fidelity.PatchCases()}, {wide, fidelity.DisplayCases()}} {
		for _, c := range set.cases {
			a, err := b.Compare(c.Name, set.setup, c.List)
			if err != nil {
				return err
			}
			f.Agree = append(f.Agree, agreement{a, 100 * a.Share()})
		}
	}
	return nil
}

// run runs a trial and puts what matters in a row.
func run(b *fidelity.Bench, h fidelity.Hold) (trial, error) {
	h.RefreshMs = refreshMs
	m, err := b.RunMarked(h)
	if err != nil {
		return trial{}, err
	}
	t := trial{Planned: h.StimulusFrames, Presented: len(m.Shown()), HoldMs: m.HeldUntilMs - m.HeldFromMs}
	t.Intervals, t.Dropped = m.Recorded()
	if m.Measurement.RTMs != nil {
		t.RTMs = *m.Measurement.RTMs
		t.PressedMs = m.PressedAtMs - m.Shown()[0].AtMs
		t.ErrorMs = t.RTMs - t.PressedMs
	}
	return t, nil
}

func trials(b *fidelity.Bench, f *figures) error {
	for _, frames := range []int{1, 2, 3, 6, 12, 60} {
		t, err := run(b, fidelity.Hold{StimulusFrames: frames})
		if err != nil {
			return err
		}
		f.Trials = append(f.Trials, t)
	}
	return nil
}

func holds(b *fidelity.Bench, f *figures) error {
	for _, ms := range []float64{30, 80, 200} {
		t, err := run(b, fidelity.Hold{StimulusFrames: 30, HoldMs: ms, HoldAfter: 5})
		if err != nil {
			return err
		}
		f.Holds = append(f.Holds, t)
	}
	return nil
}

func responses(b *fidelity.Bench, f *figures) error {
	for i := range 12 {
		t, err := run(b, fidelity.Hold{StimulusFrames: 3, AnswerAfterMs: math.Floor(150 + 37.3*float64(i))})
		if err != nil {
			return err
		}
		f.Responses = append(f.Responses, t)
	}
	return nil
}

func costs(b *fidelity.Bench, f *figures) error {
	for _, name := range library.Names() {
		c, err := b.FrameCost(name, 60)
		if err != nil {
			return err
		}
		f.Costs = append(f.Costs, cost{
			Study: name, Dots: c.Dots, Patches: c.Patches,
			MainMs: fidelity.Quantile(c.MainMs, 0.5), Main99Ms: fidelity.Quantile(c.MainMs, 0.99),
			RasterMs: fidelity.Quantile(c.RasterMs, 0.5), Raster99Ms: fidelity.Quantile(c.RasterMs, 0.99),
		})
	}
	return nil
}
