// Package fidelity measures, in a real browser, what the participant's page
// shows and when: where discs stand, how far they move, which contrast the
// screen gets, whether the picture is that of the reference raster
// (package inspection), and whether the recorder of frames and answers agrees
// with an observer of the page. Start with Bench.
//
// Tests assert the figures; web/fidelity/report writes them with pictures.
package fidelity

import (
	"context"
	_ "embed"
	"encoding/base64"
	"encoding/json"
	"errors"
	"fmt"
	"net/http"
	"net/http/httptest"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strconv"
	"time"

	"github.com/chromedp/cdproto/emulation"
	cdpruntime "github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
	"github.com/evanw/esbuild/pkg/api"

	"distal/experiments/display"
	"distal/web"
)

// Bench is a browser with the participant's drawing and timing code in it.
type Bench struct {
	ctx    context.Context
	server *httptest.Server
	close  []func()
}

// Canvas is what the page says about its canvas.
type Canvas struct {
	Width       int     `json:"width"` // device px
	Height      int     `json:"height"`
	PixelRatio  float64 `json:"pixelRatio"`
	FloatTarget bool    `json:"floatTarget"`
	Background  float64 `json:"background"` // linear light, fraction of white
	Renderer    string  `json:"renderer"`
}

// Setup is a screen to be measured.
type Setup struct {
	WidthCSSPx, HeightCSSPx int64
	PixelRatio              float64
	PxPerTan                float64 // viewing distance in device px
	BackgroundFraction      float64
	Gamma                   float64 // 0: sRGB
	Dither                  bool
}

// Open starts Chromium with the software renderer. Close ends it.
func Open(ctx context.Context) (*Bench, error) { return open(ctx) }

// OpenScaled starts Chromium on a screen that has the pixel ratio by itself,
// not by emulation, in a window of a size in CSS px. Only there can be seen how
// the page is composed at fractional ratios.
func OpenScaled(ctx context.Context, pixelRatio float64, width, height int) (*Bench, error) {
	return open(ctx, chromedp.Flag("force-device-scale-factor", strconv.FormatFloat(pixelRatio, 'g', -1, 64)), chromedp.WindowSize(width, height))
}

func open(ctx context.Context, more ...chromedp.ExecAllocatorOption) (*Bench, error) {
	b := &Bench{}
	pages, err := serve()
	if err != nil {
		return nil, err
	}
	b.server = httptest.NewServer(pages)
	b.close = append(b.close, b.server.Close)
	chromium, err := exec.LookPath("chromium")
	if err != nil {
		b.Close()
		return nil, fmt.Errorf("find Chromium (Debian's package chromium): %w", err)
	}
	profile, err := os.MkdirTemp("", "distal-fidelity-")
	if err != nil {
		b.Close()
		return nil, err
	}
	b.close = append(b.close, func() { _ = os.RemoveAll(profile) })
	options := append(chromedp.DefaultExecAllocatorOptions[:],
		chromedp.ExecPath(chromium), chromedp.NoSandbox, chromedp.UserDataDir(profile), chromedp.WSURLReadTimeout(time.Minute),
		chromedp.Flag("enable-unsafe-swiftshader", true), chromedp.Flag("use-angle", "swiftshader"),
		chromedp.Flag("disable-background-networking", true), chromedp.Flag("disable-component-update", true), chromedp.Flag("disable-sync", true),
		chromedp.Flag("disable-background-timer-throttling", true), chromedp.Flag("disable-renderer-backgrounding", true),
	)
	allocator, cancel := chromedp.NewExecAllocator(ctx, append(options, more...)...)
	b.close = append(b.close, cancel)
	b.ctx, cancel = chromedp.NewContext(allocator)
	// Cancel waits until the browser has left its profile.
	b.close = append(b.close, func() { _ = chromedp.Cancel(b.ctx); cancel() })
	err = chromedp.Run(b.ctx, chromedp.Navigate(b.server.URL), chromedp.WaitReady("#distal"))
	if err != nil {
		b.Close()
		return nil, fmt.Errorf("start Chromium: %w", err)
	}
	return b, nil
}

// Close ends the browser and removes what it left.
func (b *Bench) Close() {
	for i := len(b.close) - 1; i >= 0; i-- {
		b.close[i]()
	}
}

const shell = `<!doctype html><html lang="en"><meta charset="utf-8"><title>Fidelity</title>
<link rel="stylesheet" href="/style.css"><body class="trial"><main id="distal"></main><script src="/page.js"></script></body></html>`

// serve gives the page, cross-origin isolated as the participant's page is.
func serve() (http.Handler, error) {
	script, err := bundle("fidelity/page.ts")
	if err != nil {
		return nil, err
	}
	style, err := bundle("style/participant.css")
	if err != nil {
		return nil, err
	}
	mux := http.NewServeMux()
	file := func(path, mediaType string, content []byte) {
		mux.HandleFunc(path, func(w http.ResponseWriter, _ *http.Request) {
			w.Header().Set("Content-Type", mediaType)
			w.Header().Set("Cross-Origin-Opener-Policy", "same-origin")
			w.Header().Set("Cross-Origin-Embedder-Policy", "require-corp")
			_, _ = w.Write(content)
		})
	}
	file("/{$}", "text/html", []byte(shell))
	file("/page.js", "text/javascript", script)
	file("/style.css", "text/css", style)
	assets, err := web.Assets()
	if err != nil {
		return nil, err
	}
	file("/engine.wasm", "application/wasm", assets["engine"].Plain)
	return mux, nil
}

// bundle builds a source file of the folder web.
func bundle(name string) ([]byte, error) {
	_, here, _, _ := runtime.Caller(0)
	result := api.Build(api.BuildOptions{
		EntryPoints: []string{filepath.Join(filepath.Dir(here), "..", name)},
		Bundle:      true, Format: api.FormatIIFE, Target: api.ES2022, LogLevel: api.LogLevelSilent,
	})
	if len(result.Errors) > 0 {
		return nil, fmt.Errorf("bundle %s: %s", name, api.FormatMessages(result.Errors, api.FormatMessagesOptions{})[0])
	}
	return result.OutputFiles[0].Contents, nil
}

// call evaluates bench.NAME(args...) on the page and decodes what it gives.
func (b *Bench) call(result any, name string, args ...any) error {
	if args == nil {
		args = []any{}
	}
	text, err := json.Marshal(args)
	if err != nil {
		return err
	}
	ctx, cancel := context.WithTimeout(b.ctx, 3*time.Minute)
	defer cancel()
	await := func(p *cdpruntime.EvaluateParams) *cdpruntime.EvaluateParams { return p.WithAwaitPromise(true) }
	if err := chromedp.Run(ctx, chromedp.Evaluate("bench."+name+"(..."+string(text)+")", result, await)); err != nil {
		return fmt.Errorf("%s in the browser: %w", name, err)
	}
	return nil
}

// Screen makes the page a screen of the given kind with an empty canvas.
func (b *Bench) Screen(s Setup) (Canvas, error) {
	if err := chromedp.Run(b.ctx, emulation.SetDeviceMetricsOverride(s.WidthCSSPx, s.HeightCSSPx, s.PixelRatio, false)); err != nil {
		return Canvas{}, err
	}
	geometry := map[string]any{"devicePxPerMm": s.PxPerTan / 500, "distanceMm": 500, "backgroundFraction": s.BackgroundFraction, "gamma": nil}
	if s.Gamma > 0 {
		geometry["gamma"] = s.Gamma
	}
	var c Canvas
	return c, b.call(&c, "open", geometry, s.Dither)
}

// Withhold takes WebGL extensions away from every canvas made from now on.
func (b *Bench) Withhold(names ...string) error {
	args := make([]any, len(names))
	for i, n := range names {
		args[i] = n
	}
	var done bool
	return b.call(&done, "withhold", args...)
}

// picture is a display list as the page takes it.
func picture(l *display.List) map[string]any {
	dots, patches, batches := []float32{}, []float32{}, []int32{}
	for _, d := range l.Dots {
		dots = append(dots, d.XDeg, d.YDeg, d.DiameterDeg, d.Contrast)
	}
	for _, p := range l.Patches {
		patches = append(patches, p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD, p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode)
	}
	for _, x := range l.Batches {
		batches = append(batches, x.Kind, x.First, x.Count)
	}
	return map[string]any{"dots": dots, "patches": patches, "batches": batches}
}

// Grey draws l and gives the 8-bit values that go to the screen, row by row.
func (b *Bench) Grey(l *display.List) ([]byte, error) {
	var text string
	if err := b.call(&text, "grey", picture(l)); err != nil {
		return nil, err
	}
	return base64.StdEncoding.DecodeString(text)
}

// Screenshot is a PNG of the page as the browser composes it, in device pixels.
func (b *Bench) Screenshot() ([]byte, error) {
	var png []byte
	if err := chromedp.Run(b.ctx, chromedp.CaptureScreenshot(&png)); err != nil {
		return nil, err
	}
	if len(png) == 0 {
		return nil, errors.New("the browser gave no screenshot")
	}
	return png, nil
}
