package inspection_test

import (
	"math"
	"testing"

	"distal/experiments/display"
	"distal/experiments/inspection"
)

func dotList(dots ...display.Dot) *display.List {
	l := display.NewList(len(dots), 0, 1)
	for _, d := range dots {
		l.AddDot(d)
	}
	return l
}

func patchList(patches ...display.Patch) *display.List {
	l := display.NewList(0, len(patches), 1)
	for _, p := range patches {
		l.AddPatch(p)
	}
	return l
}

// centroid is the sum of what differs from the background and its mean place in px about fixation.
func centroid(r *inspection.Raster) (sum, x, y float64) {
	for j := range r.HeightPx {
		for i := range r.WidthPx {
			d := float64(r.Light[j*r.WidthPx+i]) - 1
			sum += d
			x += d * (float64(i) + 0.5 - float64(r.WidthPx)/2)
			y += d * (float64(r.HeightPx)/2 - float64(j) - 0.5)
		}
	}
	return sum, x / sum, y / sum
}

// A dot that moves by 0.17 px moves its centroid by as much within 5 %, wherever
// it starts, and keeps the light of its area within 0.5 %: also one smaller than a pixel.
func TestDotMovesBySubpixels(t *testing.T) {
	t.Parallel()
	screen := inspection.NewScreen(2, 2, 40, 0.5)
	r := inspection.NewRaster(screen)
	for _, diameterPx := range []float64{0.4, 1, 2, 2.6, 3, 4, 5.6, 12} {
		for step := range 12 {
			shift := 0.17 * float64(step)
			deg := math.Atan(shift/screen.PxPerTan) * 180 / math.Pi
			r.Draw(dotList(display.Dot{XDeg: float32(deg), YDeg: float32(-deg), DiameterDeg: float32(diameterPx / 40), Contrast: 0.8}))
			sum, x, y := centroid(r)
			if math.Abs(x-shift) > 0.0085 || math.Abs(y+shift) > 0.0085 {
				t.Errorf("diameter %v px, shift %.2f px: centroid at (%.4f, %.4f)", diameterPx, shift, x, y)
			}
			if want := 0.8 * math.Pi * diameterPx * diameterPx / 4; math.Abs(sum/want-1) > 0.005 {
				t.Errorf("diameter %v px, shift %.2f px: total %.4f, want %.4f", diameterPx, shift, sum, want)
			}
		}
	}
}

// Dots cover what is below, also each other, and never exceed their contrast.
func TestDotsCover(t *testing.T) {
	t.Parallel()
	r := inspection.NewRaster(inspection.NewScreen(4, 4, 20, 0.5))
	r.Draw(dotList(display.Dot{DiameterDeg: 2, Contrast: 1}, display.Dot{DiameterDeg: 1, Contrast: -1}))
	at := func(xDeg float64) float32 {
		i := int(r.PxPerTan*math.Tan(xDeg*math.Pi/180) + float64(r.WidthPx)/2)
		return r.Light[r.HeightPx/2*r.WidthPx+i]
	}
	if math.Abs(float64(at(0))) > 1e-6 || at(0.75) != 2 || at(1.5) != 1 {
		t.Errorf("light %v, %v, %v, want 0, 2, 1", at(0), at(0.75), at(1.5))
	}
}

// Every window and carrier by its formula at single pixels.
func TestPatches(t *testing.T) {
	t.Parallel()
	screen := inspection.NewScreen(12, 12, 20, 0.5)
	r := inspection.NewRaster(screen)
	patch := func(p display.Patch, x, y float64) float64 {
		r.Draw(patchList(p))
		i := int(r.PxPerTan*math.Tan(x*math.Pi/180) + float64(r.WidthPx)/2)
		j := int(float64(r.HeightPx)/2 - r.PxPerTan*math.Tan(y*math.Pi/180))
		gx, gy := screen.Degrees(i, j)
		if math.Abs(gx-x) > 0.03 || math.Abs(gy-y) > 0.03 {
			t.Fatalf("pixel at (%v, %v), wanted (%v, %v)", gx, gy, x, y)
		}
		u := gx*math.Cos(math.Pi/6) + gy*math.Sin(math.Pi/6)
		base := map[float32]float64{
			display.CarrierPlain: 1, display.CarrierSine: math.Sin(2*math.Pi*u + 0.4), display.CarrierSquare: math.Copysign(1, math.Sin(2*math.Pi*u+0.4)),
		}[p.Carrier]
		return (float64(r.Light[j*r.WidthPx+i]) - 1) / base
	}
	p := display.Patch{WidthDeg: 6, HeightDeg: 4, OrientationDeg: 30, SpatialFrequencyCPD: 1, PhaseRad: 0.4, Contrast: 0.5}
	for _, carrier := range []float32{display.CarrierPlain, display.CarrierSine, display.CarrierSquare} {
		p.Carrier = carrier
		p.Window = display.WindowDisc
		if got := patch(p, 1, 0.3); math.Abs(got-0.5) > 1e-5 {
			t.Errorf("carrier %v, inside: %v", carrier, got)
		}
		if got := patch(p, 0, 3); got != 0 {
			t.Errorf("carrier %v, outside: %v", carrier, got)
		}
		p.Window = display.WindowGauss
		gx, gy := 1.0, 0.3
		u, v := gx*math.Cos(math.Pi/6)+gy*math.Sin(math.Pi/6), gy*math.Cos(math.Pi/6)-gx*math.Sin(math.Pi/6)
		if got, want := patch(p, gx, gy), 0.5*math.Exp(-(u*u/9+v*v/4)/2); math.Abs(got-want) > 0.01 { // the pixel is up to 0.025 deg off
			t.Errorf("carrier %v, Gaussian: %v, want %v", carrier, got, want)
		}
	}
	cover := display.Patch{WidthDeg: 4, HeightDeg: 4, Contrast: -0.25, Window: display.WindowSurround, Mode: display.PatchCover}
	if a, b := patch(cover, 0, 0), patch(cover, 3, 3); a != 0 || math.Abs(b+0.25) > 1e-6 {
		t.Errorf("surround: %v inside, %v outside", a, b)
	}
}

// A square wave is (4/π)(sin + sin 3/3 + …), so the pattern without its
// fundamental has a third harmonic of 4/(3π) and none at the fundamental.
func TestMissingFundamental(t *testing.T) {
	t.Parallel()
	screen := inspection.NewScreen(20, 1, 40, 0.5)
	r := inspection.NewRaster(screen)
	r.Draw(patchList(display.Patch{WidthDeg: 60, HeightDeg: 60, SpatialFrequencyCPD: 0.5, Contrast: 1, Carrier: display.CarrierMissing, Window: display.WindowRect}))
	harmonic := func(cpd float64) float64 {
		sum, total := 0.0, 0.0
		for i := range r.WidthPx {
			x, _ := screen.Degrees(i, 0)
			if math.Abs(x) < 8 { // eight periods
				weight := 1 / math.Pow(math.Cos(x*math.Pi/180), -2) // degrees in a pixel
				sum += weight * (float64(r.Light[i]) - 1) * math.Sin(2*math.Pi*cpd*x)
				total += weight / 2
			}
		}
		return sum / total
	}
	if f, third := harmonic(0.5), harmonic(1.5); math.Abs(f) > 0.01 || math.Abs(third-4/(3*math.Pi)) > 0.01 {
		t.Errorf("fundamental %.4f, third harmonic %.4f, want 0 and %.4f", f, third, 4/(3*math.Pi))
	}
}

// 0.5 and 1 of white are 188 and 255 in sRGB (IEC 61966-2-1: 188 is 0.50289).
func TestGrey(t *testing.T) {
	t.Parallel()
	r := inspection.NewRaster(inspection.NewScreen(4, 4, 10, 0.5))
	r.Draw(dotList(display.Dot{DiameterDeg: 2, Contrast: 1}))
	grey := make([]uint8, len(r.Light))
	r.Grey(grey)
	if grey[0] != 188 || grey[r.HeightPx/2*r.WidthPx+r.WidthPx/2] != 255 {
		t.Errorf("grey %d and %d", grey[0], grey[r.HeightPx/2*r.WidthPx+r.WidthPx/2])
	}
}
