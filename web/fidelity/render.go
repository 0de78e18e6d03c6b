package fidelity

import (
	"bytes"
	"encoding/base64"
	"encoding/binary"
	"fmt"
	"image/png"
	"math"

	"distal/experiments/display"
	"distal/experiments/inspection"
	"distal/experiments/visual"
)

func radians(deg float64) float64 { return deg * math.Pi / 180 }
func degrees(rad float64) float64 { return rad * 180 / math.Pi }

// PixelRatios are the device pixel ratios that are measured.
var PixelRatios = []float64{1, 1.25, 1.5, 2, 3}

// linear is what an 8-bit value of a standard screen gives, as a fraction of white.
var linear = func() (table [256]float64) {
	for i := range table {
		table[i] = visual.LinearFromSRGB(float64(i) / 255)
	}
	return table
}()

// Disc is where a disc was asked for and where it was found.
type Disc struct {
	XDeg, YDeg       float64
	ErrorX, ErrorY   float64 // of the centroid, device px
	EdgeError        float64 // the largest of the four edges, device px
	WantedX, WantedY float64 // exact centroid, device px about fixation
}

// Worst is the largest error of centroid or edge.
func (d Disc) Worst() float64 {
	return max(math.Abs(d.ErrorX), math.Abs(d.ErrorY), d.EdgeError)
}

// Grid draws discs of 1° at known places and finds them in the values that go
// to the screen. png is the page as composed.
func (b *Bench) Grid(pixelRatio float64) (discs []Disc, canvas Canvas, png []byte, err error) {
	// A screen of 96 px per inch at 300 mm, in device pixels.
	k := 300 * 96 / 25.4 * pixelRatio
	if canvas, err = b.Screen(Setup{WidthCSSPx: 640, HeightCSSPx: 400, PixelRatio: pixelRatio, PxPerTan: k, BackgroundFraction: 0.5}); err != nil {
		return nil, canvas, nil, err
	}
	l := display.NewList(49, 0, 1)
	for _, y := range []float64{-9, -6, -3, 0, 3, 6, 9} {
		for _, x := range []float64{-15, -10, -5, 0, 5, 10, 15} {
			l.AddDot(display.Dot{XDeg: float32(x), YDeg: float32(y), DiameterDeg: 1, Contrast: 1})
		}
	}
	grey, err := b.Grey(l)
	if err != nil {
		return nil, canvas, nil, err
	}
	if len(grey) != canvas.Width*canvas.Height {
		return nil, canvas, nil, fmt.Errorf("%d pixels of a canvas of %d × %d", len(grey), canvas.Width, canvas.Height)
	}
	p := photo{canvas.Width, canvas.Height, make([]float64, len(grey))}
	background := linear[grey[0]]
	for i, g := range grey {
		p.light[i] = (linear[g] - background) / (1 - background)
	}
	for _, d := range l.Dots {
		discs = append(discs, p.find(float64(d.XDeg), float64(d.YDeg), 0.5, k))
	}
	png, err = b.Screenshot()
	return discs, canvas, png, err
}

// photo is coverage by white, row by row from the upper left.
type photo struct {
	width, height int
	light         []float64
}

// at is the coverage at a pixel counted about fixation, upwards.
func (p *photo) at(i, j int) float64 {
	x, y := i+p.width/2, p.height/2-1-j
	if x < 0 || y < 0 || x >= p.width || y >= p.height {
		return 0
	}
	return p.light[y*p.width+x]
}

// find measures one disc of radius r degrees on a canvas with even sides.
func (p *photo) find(xDeg, yDeg, r, k float64) Disc {
	d := Disc{XDeg: xDeg, YDeg: yDeg}
	tan := func(deg float64) float64 { return k * math.Tan(radians(deg)) }
	d.WantedX, d.WantedY = exactCentroid(xDeg, yDeg, r, k)
	left, right, low, high := tan(xDeg-r), tan(xDeg+r), tan(yDeg-r), tan(yDeg+r)
	sum, x, y := 0.0, 0.0, 0.0
	for j := int(low) - 4; j <= int(high)+4; j++ {
		for i := int(left) - 4; i <= int(right)+4; i++ {
			c := p.at(i, j)
			sum += c
			x += c * (float64(i) + 0.5)
			y += c * (float64(j) + 0.5)
		}
	}
	d.ErrorX, d.ErrorY = x/sum-d.WantedX, y/sum-d.WantedY
	// Edges: where the profile through the disc's centre crosses one half.
	middleX, middleY := int(math.Floor(tan(xDeg))), int(math.Floor(tan(yDeg)))
	row := func(i int) float64 { return p.at(i, middleY) }
	column := func(j int) float64 { return p.at(middleX, j) }
	for _, e := range []struct {
		profile        func(int) float64
		inside, wanted float64
	}{{row, tan(xDeg), left}, {row, tan(xDeg), right}, {column, tan(yDeg), low}, {column, tan(yDeg), high}} {
		d.EdgeError = max(d.EdgeError, math.Abs(crossing(e.profile, e.inside, e.wanted)-e.wanted))
	}
	return d
}

// crossing goes from inside towards outside until the profile falls below one
// half and gives the place, between pixel centres.
func crossing(profile func(int) float64, inside, outside float64) float64 {
	step := 1
	if outside < inside {
		step = -1
	}
	i := int(math.Floor(inside))
	for n := 0; profile(i) >= 0.5; n++ {
		if n > int(math.Abs(outside-inside))+10 {
			return math.Inf(1)
		}
		i += step
	}
	before, after := profile(i-step), profile(i)
	share := (before - 0.5) / (before - after)
	return float64(i-step) + 0.5 + float64(step)*share
}

// exactCentroid is the centroid on a flat screen of the disc
// (x − x₀)² + (y − y₀)² ≤ r² in degrees, by the midpoint rule: a patch
// dx·dy seen at (x, y) covers k² sec²x sec²y dx dy.
func exactCentroid(xDeg, yDeg, r, k float64) (x, y float64) {
	const n = 400
	sum := 0.0
	for j := range n {
		v := (2*(float64(j)+0.5)/n - 1) * r
		for i := range n {
			u := (2*(float64(i)+0.5)/n - 1) * r
			if u*u+v*v > r*r {
				continue
			}
			a, b := radians(xDeg+u), radians(yDeg+v)
			w := 1 / (math.Cos(a) * math.Cos(a) * math.Cos(b) * math.Cos(b))
			sum += w
			x += w * k * math.Tan(a)
			y += w * k * math.Tan(b)
		}
	}
	return x / sum, y / sum
}

// Shift is a disc moved by a small angle.
type Shift struct {
	AskedArcsec   float64
	FloatArcsec   float64 // found in the linear-light target
	ScreenArcsec  float64 // found in the dithered 8-bit values, mean of ShiftFrames frames
	FloatTotal    float64 // total light relative to the unmoved disc
	ScreenTotal   float64
	DiameterDeg   float64
	EccentricX    float64 // where the disc stands, degrees
	floatX, gridX float64
	floatSum      float64
	gridSum       float64
}

// ShiftFrames is how many frames are averaged where dithering is on.
const ShiftFrames = 32

// Shifts moves a disc in steps of 10 arcsec at 60 px a degree and finds its centroid.
func (b *Bench) Shifts(diameterDeg, xDeg float64) ([]Shift, error) {
	const size = 240
	k := 60 * 180 / math.Pi
	setup := Setup{WidthCSSPx: size, HeightCSSPx: size, PixelRatio: 1, PxPerTan: k, BackgroundFraction: 0.5, Dither: true}
	canvas, err := b.Screen(setup)
	if err != nil {
		return nil, err
	}
	var shifts []Shift
	for step := range 7 {
		s := Shift{AskedArcsec: 10 * float64(step), DiameterDeg: diameterDeg, EccentricX: xDeg}
		l := display.NewList(1, 0, 1)
		l.AddDot(display.Dot{XDeg: float32(xDeg + s.AskedArcsec/3600), YDeg: 0.1, DiameterDeg: float32(diameterDeg), Contrast: 0.9})
		light, err := b.light(l)
		if err != nil {
			return nil, err
		}
		s.floatX, s.floatSum = centroidX(light, size, canvas.Background)
		counts := make([]float64, size*size)
		for range ShiftFrames {
			grey, err := b.Grey(l)
			if err != nil {
				return nil, err
			}
			for i, g := range grey {
				counts[i] += linear[g] / ShiftFrames
			}
		}
		s.gridX, s.gridSum = centroidX(counts, size, canvas.Background)
		shifts = append(shifts, s)
	}
	first := shifts[0]
	for i := range shifts {
		s := &shifts[i]
		arcsec := func(px, from float64) float64 { return 3600 * (degrees(math.Atan(px/k)) - degrees(math.Atan(from/k))) }
		s.FloatArcsec, s.ScreenArcsec = arcsec(s.floatX, first.floatX), arcsec(s.gridX, first.gridX)
		s.FloatTotal, s.ScreenTotal = s.floatSum/first.floatSum, s.gridSum/first.gridSum
	}
	return shifts, nil
}

// light draws l and gives linear light as fractions of white.
func (b *Bench) light(l *display.List) ([]float64, error) {
	var text string
	if err := b.call(&text, "light", picture(l)); err != nil {
		return nil, err
	}
	bytes, err := base64.StdEncoding.DecodeString(text)
	if err != nil {
		return nil, err
	}
	out := make([]float64, len(bytes)/4)
	for i := range out {
		out[i] = float64(math.Float32frombits(binary.LittleEndian.Uint32(bytes[4*i:])))
	}
	return out, nil
}

// centroidX is the mean place of what exceeds the background by a tenth, in px
// about the middle.
func centroidX(light []float64, width int, background float64) (x, sum float64) {
	height := len(light) / width
	lowX, highX, lowY, highY := width, 0, height, 0
	for i, l := range light {
		if l > 1.1*background {
			lowX, highX = min(lowX, i%width), max(highX, i%width)
			lowY, highY = min(lowY, i/width), max(highY, i/width)
		}
	}
	for j := max(0, lowY-2); j <= min(height-1, highY+2); j++ {
		for i := max(0, lowX-2); i <= min(width-1, highX+2); i++ {
			d := light[j*width+i] - background
			sum += d
			x += d * (float64(i) + 0.5 - float64(width)/2)
		}
	}
	return x / sum, sum
}

// Composed draws bars of about a pixel on a canvas that fills the window and
// counts the pixels of the composed page that are not the canvas's: none, unless
// the browser scales the canvas.
func (b *Bench) Composed(pxPerTan float64) (different int, canvas Canvas, err error) {
	geometry := map[string]any{"devicePxPerMm": pxPerTan / 500, "distanceMm": 500, "backgroundFraction": 0.5, "gamma": nil}
	if err := b.call(&canvas, "open", geometry, false); err != nil {
		return 0, canvas, err
	}
	l := display.NewList(0, 1, 1)
	l.AddPatch(display.Patch{WidthDeg: 150, HeightDeg: 150, OrientationDeg: 30, SpatialFrequencyCPD: float32(0.4 * radians(pxPerTan)), Contrast: 1, Carrier: display.CarrierSquare, Window: display.WindowRect})
	grey, err := b.Grey(l)
	if err != nil {
		return 0, canvas, err
	}
	shot, err := b.Screenshot()
	if err != nil {
		return 0, canvas, err
	}
	page, err := png.Decode(bytes.NewReader(shot))
	if err != nil {
		return 0, canvas, err
	}
	for y := range min(canvas.Height, page.Bounds().Dy()) {
		for x := range min(canvas.Width, page.Bounds().Dx()) {
			if r, _, _, _ := page.At(x, y).RGBA(); byte(r>>8) != grey[y*canvas.Width+x] {
				different++
			}
		}
	}
	return different, canvas, nil
}

// Level is a contrast that was asked for and the mean that the screen got.
type Level struct{ Asked, Shown float64 }

// RampFrames is how many frames the mean contrast is taken over.
const RampFrames = 64

// Ramp shows fields of contrasts from 0.1 % to 100 %, both signs, and gives
// their mean contrast after dithering to 8 bits, about the mean of a field of contrast 0.
func (b *Bench) Ramp(gamma float64) ([]Level, error) {
	var contrasts []float64
	for _, c := range []float64{0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1} {
		contrasts = append(contrasts, c, -c)
	}
	contrasts = append(contrasts, 0)
	const cell, columns, rows = 64, 6, 4
	k := 20 * 180 / math.Pi
	if _, err := b.Screen(Setup{WidthCSSPx: cell * columns, HeightCSSPx: cell * rows, PixelRatio: 1, PxPerTan: k, BackgroundFraction: 0.5, Gamma: gamma, Dither: true}); err != nil {
		return nil, err
	}
	l := display.NewList(0, len(contrasts), 1)
	var cells []map[string]int
	for i, c := range contrasts {
		column, row := i%columns, i/columns
		x, y := float64(column*cell+cell/2-cell*columns/2), float64(cell*rows/2-row*cell-cell/2)
		l.AddPatch(display.Patch{
			XDeg: float32(degrees(math.Atan(x / k))), YDeg: float32(degrees(math.Atan(y / k))), WidthDeg: 2.9, HeightDeg: 2.9,
			Contrast: float32(c), Window: display.WindowRect, Carrier: display.CarrierPlain, Mode: display.PatchAdd,
		})
		cells = append(cells, map[string]int{"x": column*cell + 8, "y": row*cell + 8, "width": cell - 16, "height": cell - 16})
	}
	var counts [][256]float64
	if err := b.call(&counts, "histogram", picture(l), RampFrames, cells); err != nil {
		return nil, err
	}
	mean := make([]float64, len(counts))
	for i, histogram := range counts {
		n := 0.0
		for value, count := range histogram {
			l := linear[value]
			if gamma > 0 {
				l = math.Pow(float64(value)/255, gamma)
			}
			mean[i] += count * l
			n += count
		}
		mean[i] /= n
	}
	var levels []Level
	zero := mean[len(mean)-1]
	for i, c := range contrasts {
		levels = append(levels, Level{c, mean[i]/zero - 1})
	}
	return levels, nil
}

// Agreement is how the browser's picture compares with the reference raster's.
type Agreement struct {
	Name   string
	Pixels int
	Within int // pixels that differ by at most one grey level
	Worst  int // largest difference, grey levels
	// Changed counts the pixels that are not background in the reference.
	Changed int
}

// Share is the share of pixels that agree.
func (a Agreement) Share() float64 { return float64(a.Within) / float64(a.Pixels) }

// Compare draws a list without dithering and compares it with the reference raster.
func (b *Bench) Compare(name string, s Setup, l *display.List) (Agreement, error) {
	a := Agreement{Name: name}
	canvas, err := b.Screen(s)
	if err != nil {
		return a, err
	}
	grey, err := b.Grey(l)
	if err != nil {
		return a, err
	}
	r := inspection.NewRaster(inspection.Screen{WidthPx: canvas.Width, HeightPx: canvas.Height, PxPerTan: s.PxPerTan, BackgroundFraction: s.BackgroundFraction})
	r.Draw(l)
	want := make([]byte, len(grey))
	r.Grey(want)
	a.Pixels = len(grey)
	background := math.Round(255 * visual.SRGBFromLinear(s.BackgroundFraction))
	for i := range grey {
		difference := int(grey[i]) - int(want[i])
		difference = max(difference, -difference)
		if difference <= 1 {
			a.Within++
		}
		a.Worst = max(a.Worst, difference)
		if float64(want[i]) != background {
			a.Changed++
		}
	}
	return a, nil
}
