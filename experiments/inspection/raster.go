// Package inspection computes what a display physically is on a given screen,
// from the frames that the engine really makes: it rasters display lists,
// cuts space-time pictures, measures directional motion energy and correlation,
// checks sampling and looks for flashes. Start with Raster.
//
// # What a raster is
//
// The participant's renderer draws a list by the same definition, so that both
// agree pixel by pixel. Lengths are device pixels, angles degrees, luminance is
// linear and 1 is the background.
//
// Pixel (i, j), counted from the upper left, has its centre at
// px = i + ½ − W/2, py = H/2 − j − ½ about fixation, seen at
// x = atan(px/K), y = atan(py/K), with K = distance × pixels per mm: the exact
// projection on a flat screen.
//
// A dot at (x, y) with diameter d has its centre at (K tan x, K tan y) and the
// radii rx = K (tan(x + d/2) − tan(x − d/2))/2 and ry likewise; r = √(rx ry).
// It is drawn with the mean radius R = max(1.5, √(r² − 1/6)), both radii
// scaled by R/r, and with contrast × min(1, r²/(R² + 1/6)). With q the distance
// from the centre in drawn radii and t = (1 − q) R clamped to −1 … 1, the pixel
// is covered by the share ½ + t − t|t|/2, taken at its centre, and becomes
//
//	(1 − coverage) × before + coverage × (1 + contrast).
//
// The edge is the integral of a triangle two pixels wide, the narrowest whose
// spectrum vanishes doubly at one cycle a pixel: then sampling at pixel centres
// keeps total light and centroid wherever the dot is. A smoothed disc holds
// the light of π(R² + 1/6), which the drawn radius makes up for.
//
// A patch has the carrier c and the window w at the pixel's centre, as defined
// in package display; its hard edges are ramps of one pixel at the screen's
// centre, p = 1/K rad: clamp(½ + inside/p, 0, 1), inside being the distance from the edge.
// An added patch gives before + contrast × c × w, a covering one
// (1 − w) × before + w × (1 + contrast × c).
package inspection

import (
	"math"

	"distal/experiments/display"
	"distal/experiments/visual"
)

// Screen is what frames are drawn on.
type Screen struct {
	WidthPx, HeightPx  int
	PxPerTan           float64 // K: viewing distance in device pixels
	BackgroundFraction float64 // luminance of the background as a fraction of white
}

// NewScreen is a screen that shows width × height degrees about fixation with
// pxPerDeg pixels a degree at its centre.
func NewScreen(widthDeg, heightDeg, pxPerDeg, backgroundFraction float64) Screen {
	k := pxPerDeg * 180 / math.Pi
	size := func(deg float64) int { return max(1, int(math.Ceil(2*k*math.Tan(deg/2*math.Pi/180)))) }
	return Screen{size(widthDeg), size(heightDeg), k, backgroundFraction}
}

// Degrees gives where the centre of pixel (i, j) is seen.
func (s *Screen) Degrees(i, j int) (xDeg, yDeg float64) {
	px := float64(i) + 0.5 - float64(s.WidthPx)/2
	py := float64(s.HeightPx)/2 - float64(j) - 0.5
	return degrees(math.Atan(px / s.PxPerTan)), degrees(math.Atan(py / s.PxPerTan))
}

func degrees(rad float64) float64 { return rad * 180 / math.Pi }
func radians(deg float64) float64 { return deg * math.Pi / 180 }

// Raster draws display lists. It is made once for a screen and reused.
type Raster struct {
	Screen
	Light []float32 // row by row from the upper left, 1 is the background
	x, y  []float64 // degrees of columns and rows
}

// NewRaster makes a raster of a screen, showing the background.
func NewRaster(s Screen) *Raster {
	r := &Raster{Screen: s, Light: make([]float32, s.WidthPx*s.HeightPx), x: make([]float64, s.WidthPx), y: make([]float64, s.HeightPx)}
	for i := range r.x {
		r.x[i], _ = s.Degrees(i, 0)
	}
	for j := range r.y {
		_, r.y[j] = s.Degrees(0, j)
	}
	r.clear()
	return r
}

func (r *Raster) clear() {
	for i := range r.Light {
		r.Light[i] = 1
	}
}

// Draw shows l on the background.
func (r *Raster) Draw(l *display.List) {
	r.clear()
	for _, b := range l.Batches {
		for i := b.First; i < b.First+b.Count; i++ {
			if b.Kind == display.BatchDots {
				r.dot(&l.Dots[i])
			} else {
				r.patch(&l.Patches[i])
			}
		}
	}
}

// A dot's edge: variance of the triangle that smooths it, and the smallest
// radius that it is drawn with, in px.
const (
	edgeVariance = 1.0 / 6
	minRadius    = 1.5
)

func (r *Raster) dot(d *display.Dot) {
	x, y, half := radians(float64(d.XDeg)), radians(float64(d.YDeg)), radians(float64(d.DiameterDeg))/2
	cx, cy := r.PxPerTan*math.Tan(x), r.PxPerTan*math.Tan(y)
	rx := r.PxPerTan * (math.Tan(x+half) - math.Tan(x-half)) / 2
	ry := r.PxPerTan * (math.Tan(y+half) - math.Tan(y-half)) / 2
	radius := math.Sqrt(rx * ry)
	drawn := max(minRadius, math.Sqrt(max(0, radius*radius-edgeVariance)))
	contrast := float64(d.Contrast) * min(1, radius*radius/(drawn*drawn+edgeVariance))
	rx, ry, radius = rx*drawn/radius, ry*drawn/radius, drawn
	reachX, reachY := rx*(1+1/radius), ry*(1+1/radius)
	fromX, toX := r.columns(cx-reachX, cx+reachX)
	fromY, toY := r.rows(cy-reachY, cy+reachY)
	for j := fromY; j < toY; j++ {
		v := (float64(r.HeightPx)/2 - float64(j) - 0.5 - cy) / ry
		for i := fromX; i < toX; i++ {
			u := (float64(i) + 0.5 - float64(r.WidthPx)/2 - cx) / rx
			t := max(-1, min(1, (1-math.Sqrt(u*u+v*v))*radius))
			coverage := 0.5 + t - t*math.Abs(t)/2
			if coverage > 0 {
				at := &r.Light[j*r.WidthPx+i]
				*at = float32((1-coverage)*float64(*at) + coverage*(1+contrast))
			}
		}
	}
}

// columns and rows are the pixels whose centres lie within bounds in px about fixation.
func (r *Raster) columns(low, high float64) (from, to int) {
	half := float64(r.WidthPx) / 2
	return bound(low+half-0.5, high+half-0.5, r.WidthPx)
}

func (r *Raster) rows(low, high float64) (from, to int) {
	half := float64(r.HeightPx) / 2
	return bound(half-0.5-high, half-0.5-low, r.HeightPx)
}

func bound(low, high float64, n int) (from, to int) {
	low, high = max(-1, min(low, float64(n))), max(-1, min(high, float64(n)))
	return max(0, int(math.Ceil(low))), min(n, int(math.Floor(high))+1)
}

func clamp(x float64) float64 { return max(0, min(1, x)) }

func (r *Raster) patch(p *display.Patch) {
	f := newForm(p, degrees(1/r.PxPerTan))
	for j, y := range r.y {
		if math.Abs(y-f.y) > f.reach {
			continue
		}
		for i, x := range r.x {
			if math.Abs(x-f.x) > f.reach {
				continue
			}
			w, c := f.at(x, y)
			if w == 0 {
				continue
			}
			at := &r.Light[j*r.WidthPx+i]
			if p.Mode == display.PatchAdd {
				*at = float32(float64(*at) + f.contrast*c*w)
			} else {
				*at = float32((1-w)*float64(*at) + w*(1+f.contrast*c))
			}
		}
	}
}

// form is a patch made ready to be evaluated.
type form struct {
	window, carrier         int
	x, y, reach, pixel      float64
	sin, cos                float64
	halfU, halfV, ramp      float64
	frequency, phase        float64
	contrast, shorterRadius float64
}

func newForm(p *display.Patch, pixel float64) *form {
	f := &form{
		window: int(p.Window), carrier: int(p.Carrier), x: float64(p.XDeg), y: float64(p.YDeg), pixel: pixel,
		halfU: float64(p.WidthDeg) / 2, halfV: float64(p.HeightDeg) / 2, ramp: float64(p.RampDeg),
		frequency: 2 * math.Pi * float64(p.SpatialFrequencyCPD), phase: float64(p.PhaseRad), contrast: float64(p.Contrast),
	}
	f.sin, f.cos = math.Sincos(radians(float64(p.OrientationDeg)))
	f.shorterRadius = min(f.halfU, f.halfV)
	diagonal := math.Hypot(float64(p.WidthDeg), float64(p.HeightDeg))
	switch f.window {
	case display.WindowSurround, display.WindowRectSurround:
		f.reach = math.Inf(1)
	case display.WindowGauss:
		f.reach = 1.5 * diagonal
	default:
		f.reach = diagonal/2 + 0.1
	}
	return f
}

// at gives window and carrier at a place in degrees.
func (f *form) at(x, y float64) (window, carrier float64) {
	dx, dy := x-f.x, y-f.y
	u, v := dx*f.cos+dy*f.sin, dy*f.cos-dx*f.sin
	switch f.window {
	case display.WindowDisc, display.WindowSurround:
		window = f.edge((1 - math.Hypot(u/f.halfU, v/f.halfV)) * f.shorterRadius)
	case display.WindowRect, display.WindowRectSurround:
		window = f.edge(f.halfU-math.Abs(u)) * f.edge(f.halfV-math.Abs(v))
	default:
		if q := u*u/(f.halfU*f.halfU) + v*v/(f.halfV*f.halfV); q <= 9 {
			window = math.Exp(-q / 2)
		}
	}
	if f.window == display.WindowSurround || f.window == display.WindowRectSurround {
		window = 1 - window
	}
	return window, f.wave(f.frequency*u + f.phase)
}

// edge is the window at a distance in degrees inside the edge.
func (f *form) edge(inside float64) float64 {
	if f.ramp <= f.pixel {
		return clamp(0.5 + inside/f.pixel)
	}
	switch {
	case inside <= 0:
		return 0
	case inside >= f.ramp:
		return 1
	}
	return 0.5 * (1 - math.Cos(math.Pi*inside/f.ramp))
}

func (f *form) wave(phase float64) float64 {
	sine := math.Sin(phase)
	square := 1.0
	if sine < 0 {
		square = -1
	}
	switch f.carrier {
	case display.CarrierSine:
		return sine
	case display.CarrierSquare:
		return square
	case display.CarrierMissing:
		return square - 4/math.Pi*sine
	}
	return 1
}

// Grey gives the 8-bit values of a standard (sRGB) screen without dithering.
func (r *Raster) Grey(out []uint8) {
	for i, l := range r.Light {
		out[i] = uint8(math.Round(255 * visual.SRGBFromLinear(clamp(float64(l)*r.BackgroundFraction))))
	}
}
