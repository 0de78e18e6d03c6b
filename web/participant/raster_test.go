// Package participant_test checks in a real browser what the participant's
// renderer draws.
package participant_test

import (
	"context"
	"encoding/base64"
	"encoding/binary"
	"fmt"
	"math"
	"net/http"
	"net/http/httptest"
	"testing"
	"time"

	"github.com/chromedp/chromedp"
	"github.com/evanw/esbuild/pkg/api"

	"distal/experiments/display"
	"distal/experiments/inspection"
	"distal/experiments/visual"
)

// Canvas of the tests: 400 × 300 device pixels of 3.6 a mm, seen from 570 mm.
const (
	width, height = 400, 300
	pxPerMm       = 3.6
	distanceMm    = 570.0
)

// page opens Chromium on an empty page with the renderer and a canvas.
func page(t *testing.T) context.Context {
	t.Helper()
	built := api.Build(api.BuildOptions{EntryPoints: []string{"render.ts"}, Bundle: true, Format: api.FormatIIFE, GlobalName: "drawing"})
	if len(built.Errors) > 0 {
		t.Fatal(built.Errors)
	}
	server := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		if r.URL.Path == "/render.js" {
			w.Header().Set("Content-Type", "text/javascript")
			_, _ = w.Write(built.OutputFiles[0].Contents)
			return
		}
		w.Header().Set("Content-Type", "text/html")
		_, _ = w.Write([]byte(`<!doctype html><canvas></canvas><script src="/render.js"></script>`))
	}))
	t.Cleanup(server.Close)
	options := append(chromedp.DefaultExecAllocatorOptions[:],
		chromedp.ExecPath("/usr/bin/chromium"), chromedp.NoSandbox,
		chromedp.Flag("enable-unsafe-swiftshader", true), chromedp.Flag("use-angle", "swiftshader"),
		chromedp.Flag("disable-background-networking", true), chromedp.Flag("disable-component-update", true), chromedp.Flag("disable-sync", true),
		chromedp.UserDataDir(t.TempDir()), chromedp.WSURLReadTimeout(time.Minute),
	)
	allocator, cancel := chromedp.NewExecAllocator(context.Background(), options...)
	t.Cleanup(cancel)
	ctx, cancel := chromedp.NewContext(allocator)
	t.Cleanup(cancel)
	start := fmt.Sprintf(`
		window.renderer = new drawing.Renderer(document.querySelector("canvas"),
			{devicePxPerMm: %v, distanceMm: %v, backgroundFraction: 0.5, gamma: null}, true, false);
		renderer.resize(%d, %d);
		window.bytes = (text) => Uint8Array.from(atob(text), (c) => c.charCodeAt(0)).buffer;
		window.show = (dots, patches, batches) => {
			const list = {dots: new Float32Array(bytes(dots)), patches: new Float32Array(bytes(patches)), batches: new Int32Array(bytes(batches))};
			list.dotCount = list.dots.length / 4; list.patchCount = list.patches.length / 12; list.batchCount = list.batches.length / 3;
			renderer.draw(list);
			const light = renderer.readLight().filter((_, i) => i %% 4 === 0);
			let text = "";
			for (const byte of new Uint8Array(light.buffer)) text += String.fromCharCode(byte);
			return btoa(text);
		};
		renderer.floatTarget`, pxPerMm, distanceMm, width, height)
	var float bool
	if err := chromedp.Run(ctx, chromedp.Navigate(server.URL), chromedp.Evaluate(start, &float)); err != nil {
		t.Fatal(err)
	}
	if !float {
		t.Fatal("the browser has no float target to draw to")
	}
	return ctx
}

func words[T float32 | int32](x []T) string {
	var b []byte
	for _, v := range x {
		switch v := any(v).(type) {
		case float32:
			b = binary.LittleEndian.AppendUint32(b, math.Float32bits(v))
		case int32:
			b = binary.LittleEndian.AppendUint32(b, uint32(v))
		}
	}
	return base64.StdEncoding.EncodeToString(b)
}

// draw gives the linear light of a list, row by row from the upper left, as fractions of white.
func draw(t *testing.T, ctx context.Context, l *display.List) []float64 {
	t.Helper()
	var dots, patches []float32
	for _, d := range l.Dots {
		dots = append(dots, d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast)
	}
	for _, p := range l.Patches {
		patches = append(patches, p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD,
			p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode)
	}
	var batches []int32
	for _, b := range l.Batches {
		batches = append(batches, b.Kind, b.First, b.Count)
	}
	var text string
	call := fmt.Sprintf("show(%q, %q, %q)", words(dots), words(patches), words(batches))
	if err := chromedp.Run(ctx, chromedp.Evaluate(call, &text)); err != nil {
		t.Fatal(err)
	}
	raw, err := base64.StdEncoding.DecodeString(text)
	if err != nil || len(raw) != 4*width*height {
		t.Fatal(err, len(raw))
	}
	light := make([]float64, width*height)
	for i := range light {
		row, column := height-1-i/width, i%width // WebGL's first row is the lowest
		light[i] = float64(math.Float32frombits(binary.LittleEndian.Uint32(raw[4*(row*width+column):])))
	}
	return light
}

// In Chromium every display is drawn as the Go raster draws it: within one grey
// level of 255 over at least 99.5 % of the pixels.
func TestDisplaysAgreeWithRaster(t *testing.T) {
	t.Parallel()
	ctx := page(t)
	raster := inspection.NewRaster(inspection.Screen{WidthPx: width, HeightPx: height, PxPerTan: pxPerMm * distanceMm, BackgroundFraction: 0.5})
	grey := func(light float64) float64 { return 255 * visual.SRGBFromLinear(max(0, min(1, light))) }
	for _, k := range display.Kinds() {
		v := k.Defaults()
		d := k.New(v)
		l := display.NewList(d.Size())
		d.Begin(display.Trial{Values: v, Seed: 5, IntervalMs: 1000.0 / 60, XDeg: 0.3})
		d.Step(0, l)
		for range 2 {
			l.Reset()
			d.Step(5, l)
			raster.Draw(l)
			light := draw(t, ctx, l)
			off, worst, shown := 0, 0.0, 0
			for i := range light {
				want := 0.5 * float64(raster.Light[i])
				if math.Abs(want-0.5) > 0.01 {
					shown++
				}
				difference := math.Abs(grey(light[i]) - grey(want))
				worst = max(worst, difference)
				if difference > 1 {
					off++
				}
			}
			if share := float64(off) / (width * height); share > 0.005 || shown == 0 {
				t.Errorf("%s: %.2f %% of the pixels are off by more than a grey level, %.1f at worst; %d pixels differ from the background", k.Name, 100*share, worst, shown)
			}
		}
	}
}

// A dot that moves by 10 arcsec, a tenth of a pixel here, moves its luminance
// centroid by 10 arcsec within a tenth of that, from wherever it starts.
func TestTenArcsec(t *testing.T) {
	t.Parallel()
	ctx := page(t)
	const step = 10.0 / 3600
	centroid := func(xDeg float64) float64 {
		l := display.NewList(1, 0, 1)
		l.AddDot(display.Dot{XDeg: float32(xDeg), DiameterDeg: 0.15, Contrast: 0.9})
		sum, moment := 0.0, 0.0
		for i, light := range draw(t, ctx, l) {
			sum += light - 0.5
			moment += (light - 0.5) * (float64(i%width) + 0.5 - width/2)
		}
		return math.Atan(moment/sum/(pxPerMm*distanceMm)) * 180 / math.Pi
	}
	for i := range 12 {
		x := 0.007 * float64(i)
		if moved := centroid(x+step) - centroid(x); math.Abs(moved/step-1) > 0.1 {
			t.Errorf("from %.3f deg: moved by %.2f arcsec, want 10", x, 3600*moved)
		}
	}
}
