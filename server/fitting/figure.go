package fitting

import (
	"fmt"
	"image/color"
	"io"
	"math"
	"path/filepath"
	"strings"

	"distal/experiments/psychometric"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgpdf"
	"gonum.org/v1/plot/vg/vgsvg"
)

// Look of the figure: hairline axes, ink for data and curve, one accent for what is estimated.
var (
	ink    = color.RGBA{0x1c, 0x1c, 0x1a, 0xff}
	quiet  = color.RGBA{0x5f, 0x5f, 0x58, 0xff}
	accent = color.RGBA{0x8a, 0x3b, 0x12, 0xff}
)

const (
	hairline  = vg.Length(0.4) // points
	curveLine = vg.Length(1)
	textSize  = vg.Length(7.5)
	panelWide = 86 * vg.Millimeter // a column of a journal, for one panel
	panelHigh = 64 * vg.Millimeter
	smallWide = 58 * vg.Millimeter // a third of a page, for several
	smallHigh = 48 * vg.Millimeter
	pngDPI    = 300
	// fewPoints is the number of levels up to which each is drawn; more are pooled.
	fewPoints = 12
)

// FigureFormats are the file name endings that a figure can have.
var FigureFormats = []string{"svg", "png", "pdf"}

// FigureFormat is the format that a file name asks for.
func FigureFormat(name string) (string, error) {
	ending := strings.ToLower(strings.TrimPrefix(filepath.Ext(name), "."))
	for _, f := range FigureFormats {
		if f == ending {
			return f, nil
		}
	}
	return "", fmt.Errorf("figure %q: the name must end in .%s", name, strings.Join(FigureFormats, ", ."))
}

// WriteFigure draws data and fitted functions, one panel a group, in a format of
// FigureFormats. label is what the levels are, with their unit; empty: made from the
// column's name.
func (r *Report) WriteFigure(w io.Writer, format, label string) error {
	if label == "" {
		label = Label(r.columns.Level)
	}
	columns := min(len(r.Fits), 3)
	rows := (len(r.Fits) + columns - 1) / columns
	wide, high := panelWide, panelHigh
	if len(r.Fits) > 1 {
		wide, high = smallWide*vg.Length(columns), smallHigh*vg.Length(rows)
	}
	c, err := canvas(format, wide, high)
	if err != nil {
		return err
	}
	x := r.extent()
	panels := make([][]*plot.Plot, rows)
	for i := range panels {
		panels[i] = make([]*plot.Plot, columns)
	}
	for i := range r.Fits {
		p := r.panel(&r.Fits[i], x, label)
		if i%columns > 0 {
			p.Y.Label.Text = ""
		}
		if i+columns < len(r.Fits) {
			p.X.Label.Text = ""
		}
		panels[i/columns][i%columns] = p
	}
	return writeTiles(w, c, panels)
}

func canvas(format string, wide, high vg.Length) (vg.CanvasWriterTo, error) {
	switch format {
	case "svg":
		return vgsvg.New(wide, high), nil
	case "pdf":
		return vgpdf.New(wide, high), nil
	case "png":
		return vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(wide, high), vgimg.UseDPI(pngDPI))}, nil
	}
	return nil, fmt.Errorf("figure format %q is none of %s", format, strings.Join(FigureFormats, ", "))
}

// extent is the common horizontal range on the scale, with room at the sides, and where
// trials at level 0 of a log10 scale are drawn.
type extent struct {
	low, high float64
	zero      float64
	hasZero   bool
	log       bool
}

func (r *Report) extent() extent {
	x := extent{low: math.Inf(1), high: math.Inf(-1), log: r.model.Scale == psychometric.Log10}
	for _, f := range r.Fits {
		for _, l := range f.Result.Data {
			if x.log && l.X == 0 {
				x.hasZero = true
				continue
			}
			x.low, x.high = math.Min(x.low, x.at(l.X)), math.Max(x.high, x.at(l.X))
		}
	}
	if x.low > x.high {
		x.low, x.high = 0, 0
	}
	// A threshold a little outside the levels is drawn where it is.
	low, high := x.low, x.high
	for _, f := range r.Fits {
		if t := f.Result.Threshold; t.Valid && (!x.log || t.Value > 0) {
			if at := x.at(t.Value); at > low-(high-low)/2 && at < high+(high-low)/2 {
				x.low, x.high = math.Min(x.low, at), math.Max(x.high, at)
			}
		}
	}
	room := 0.06 * (x.high - x.low)
	if room == 0 {
		room = 0.3
	}
	x.low -= room
	x.high += room
	if x.hasZero {
		x.zero = x.low - room
		x.low = x.zero - room
	}
	return x
}

// at is a level's place on the axis.
func (x extent) at(level float64) float64 {
	switch {
	case !x.log:
		return level
	case level == 0:
		return x.zero
	}
	return math.Log10(level)
}

// level is the inverse of at.
func (x extent) level(at float64) float64 {
	if x.log {
		return math.Pow(10, at)
	}
	return at
}

func (r *Report) panel(f *Fit, x extent, label string) *plot.Plot {
	p := plot.New()
	style := lettering()
	r.axes(p, x, label, style)
	if f.Group != "" {
		p.Title.Text = f.Group
		p.Title.TextStyle.Color = ink
		p.Title.TextStyle.Font = style.Font
		p.Title.Padding = vg.Points(3)
	}
	f.draw(p, x, style)
	return p
}

func (r *Report) axes(p *plot.Plot, x extent, label string, style text.Style) {
	p.X.Min, p.X.Max = x.low, x.high
	p.Y.Min, p.Y.Max = r.lowest()-0.03, 1.03
	p.X.Label.Text = label
	p.Y.Label.Text = "proportion correct"
	if r.model.Guess == 0 {
		p.Y.Label.Text = "proportion of responses"
	}
	p.X.Tick.Marker, p.Y.Tick.Marker = ticks{x}, plot.ConstantTicks(proportionTicks(p.Y.Min))
	styleAxes(p, style)
}

// lowest is the bottom of the vertical axis: the guess rate or the least proportion seen.
func (r *Report) lowest() float64 {
	low := r.model.Guess
	for _, f := range r.Fits {
		for _, q := range pooled(f.Result.Data, extent{}) {
			low = math.Min(low, q.share())
		}
	}
	return math.Max(low, 0)
}

func proportionTicks(from float64) []plot.Tick {
	step := 0.25
	if from > 0.4 {
		step = 0.1
	}
	var list []plot.Tick
	for i := 0; ; i++ {
		y := 1 - step*float64(i)
		if y < from {
			return list
		}
		list = append(list, plot.Tick{Value: y, Label: strings.TrimSuffix(fmt.Sprintf("%.2f", y), "0")})
	}
}

// draw the curve, the data, and the threshold with its interval and its label.
func (f *Fit) draw(p *plot.Plot, x extent, style text.Style) {
	const points = 300
	from := x.low
	if x.hasZero {
		from = x.zero + 0.5*(x.zero-x.low) // the curve does not reach the place of level 0
	}
	curve := make(plotter.XYs, points)
	for i := range curve {
		at := from + (x.high-from)*float64(i)/(points-1)
		curve[i] = plotter.XY{X: at, Y: f.Result.Predict(x.level(at))}
	}
	if f.model.Guess > 0 {
		p.Add(guessing{f.model.Guess, style})
	}
	p.Add(&plotter.Line{XYs: curve, LineStyle: draw.LineStyle{Color: ink, Width: curveLine}})
	p.Add(mark{f, x, style}, circles{pooled(f.Result.Data, x)})
}

// point is one level, or several neighbours, drawn as one.
type point struct{ at, n, k float64 }

func (q point) share() float64 { return q.k / q.n }

// pooled are the points to draw: the levels, or where there are many fewPoints groups of
// neighbours with about equal numbers of trials.
func pooled(d psychometric.Data, x extent) []point {
	share := 0.0
	if len(d) > fewPoints {
		share = float64(d.Trials()) / fewPoints
	}
	var list []point
	var q point
	for i, l := range d {
		n := float64(l.N)
		if x.log && l.X == 0 { // has a place of its own
			list = append(list, point{x.zero, n, float64(l.K)})
			continue
		}
		q.at += n * x.at(l.X)
		q.n += n
		q.k += float64(l.K)
		if q.n >= share || i == len(d)-1 {
			list = append(list, point{q.at / q.n, q.n, q.k})
			q = point{}
		}
	}
	return list
}

// circles are points with an area that grows with their trials.
type circles struct{ points []point }

var _ plot.Plotter = circles{}

// Plot implements plot.Plotter.
func (s circles) Plot(c draw.Canvas, p *plot.Plot) {
	toX, toY := p.Transforms(&c)
	most := 0.0
	for _, q := range s.points {
		most = math.Max(most, q.n)
	}
	for _, q := range s.points {
		at := vg.Point{X: toX(q.at), Y: toY(q.share())}
		radius := vg.Points(math.Max(2.7*math.Sqrt(q.n/most), 0.9))
		c.DrawGlyph(draw.GlyphStyle{Color: color.White, Radius: radius, Shape: draw.CircleGlyph{}}, at)
		c.DrawGlyph(draw.GlyphStyle{Color: ink, Radius: radius, Shape: draw.RingGlyph{}}, at)
	}
}

// guessing is a dashed hairline at the guess rate, named at its right end.
type guessing struct {
	rate  float64
	style text.Style
}

var _ plot.Plotter = guessing{}

// Plot implements plot.Plotter.
func (g guessing) Plot(c draw.Canvas, p *plot.Plot) {
	_, toY := p.Transforms(&c)
	y := toY(g.rate)
	dashes := []vg.Length{vg.Points(2), vg.Points(2)}
	c.StrokeLine2(draw.LineStyle{Color: quiet, Width: hairline, Dashes: dashes}, c.Min.X, y, c.Max.X, y)
	style := g.style
	style.Color, style.XAlign, style.YAlign = quiet, draw.XRight, draw.YBottom
	c.FillText(style, vg.Point{X: c.Max.X, Y: y + vg.Points(2)}, "guessing")
}

// mark is the threshold: a bar for its interval at the height of its criterion, a hairline
// down to the axis, and its numbers beside it.
type mark struct {
	fit   *Fit
	x     extent
	style text.Style
}

var _ plot.Plotter = mark{}

// Plot implements plot.Plotter.
func (m mark) Plot(c draw.Canvas, p *plot.Plot) {
	toX, toY := p.Transforms(&c)
	style := m.style
	style.Color = accent
	style.XAlign, style.YAlign = draw.XLeft, draw.YCenter
	e := m.fit.Result.Threshold
	off := e.Valid && (m.x.at(e.Value) < m.x.low || m.x.at(e.Value) > m.x.high)
	if !e.Valid || off {
		words := strings.ReplaceAll(m.fit.Result.Status.String(), "_", " ") + ": threshold "
		if off {
			words += short(e.Value) + " (" + shortInterval(e.Interval) + ")"
		} else {
			words += interval(e.Interval)
		}
		c.FillText(style, vg.Point{X: c.Min.X + vg.Points(6), Y: c.Min.Y + (c.Max.Y-c.Min.Y)/2}, words)
		return
	}
	inside := func(x vg.Length) vg.Length { return min(max(x, c.Min.X), c.Max.X) }
	y := toY(m.fit.Result.Predict(e.Value))
	left, right := c.Min.X, c.Max.X
	if !e.Interval.OpenLow && e.Interval.Low > 0 || !m.x.log {
		left = inside(toX(m.x.at(e.Interval.Low)))
	}
	if !e.Interval.OpenHigh {
		right = inside(toX(m.x.at(e.Interval.High)))
	}
	at := inside(toX(m.x.at(e.Value)))
	c.StrokeLine2(draw.LineStyle{Color: accent, Width: hairline}, at, c.Min.Y, at, y)
	c.StrokeLine2(draw.LineStyle{Color: accent, Width: vg.Points(1.2)}, left, y, right, y)
	c.DrawGlyph(draw.GlyphStyle{Color: accent, Radius: vg.Points(1.6), Shape: draw.CircleGlyph{}}, vg.Point{X: at, Y: y})
	label := short(e.Value) + " (" + shortInterval(e.Interval) + ")"
	beside := vg.Point{X: right + vg.Points(5), Y: y}
	if beside.X+style.Width(label) > c.Max.X {
		style.XAlign = draw.XRight
		beside = vg.Point{X: c.Max.X - vg.Points(2), Y: y - vg.Points(8)}
	}
	c.FillText(style, beside, label)
}

// short has three significant digits.
func short(x float64) string { return fmt.Sprintf("%.3g", x) }

func shortInterval(i psychometric.Interval) string {
	switch {
	case i.OpenLow && i.OpenHigh:
		return "open"
	case i.OpenLow:
		return "≤ " + short(i.High)
	case i.OpenHigh:
		return "≥ " + short(i.Low)
	}
	return short(i.Low) + "–" + short(i.High)
}

// ticks of the horizontal axis: at 1, 2 and 5 times powers of ten on a log10 scale.
type ticks struct{ x extent }

var _ plot.Ticker = ticks{}

// Ticks implements plot.Ticker.
func (t ticks) Ticks(low, high float64) []plot.Tick {
	if !t.x.log {
		return plot.DefaultTicks{}.Ticks(low, high)
	}
	digits := []float64{1, 2, 5}
	switch span := high - low; {
	case span > 3:
		digits = []float64{1}
	case span < 0.6:
		digits = []float64{1, 1.5, 2, 3, 4, 5, 6, 7, 8, 9}
	}
	var list []plot.Tick
	if t.x.hasZero {
		list = append(list, plot.Tick{Value: t.x.zero, Label: "0"})
		low = t.x.zero + (t.x.zero - low)
	}
	step := math.Max(math.Ceil((high-low)/8), 1)
	for decade := math.Floor(low); decade <= high; decade += step {
		for _, d := range digits {
			if at := decade + math.Log10(d); at >= low && at <= high {
				list = append(list, plot.Tick{Value: at, Label: fmt.Sprintf("%.6g", d*math.Pow(10, decade))})
			}
		}
	}
	return list
}

// units at the end of column names, and how they are written.
var units = []struct{ ending, unit string }{
	{"_deg_per_s", "deg/s"}, {"_cycles_per_deg", "cycles/deg"}, {"_percent", "%"}, {"_arcmin", "arcmin"}, {"_arcsec", "arcsec"},
	{"_deg", "deg"}, {"_ms", "ms"}, {"_hz", "Hz"}, {"_db", "dB"}, {"_s", "s"},
}

// Label is what a column holds, in words: speed_deg_per_s becomes "speed (deg/s)".
func Label(column string) string {
	for _, u := range units {
		if name, ok := strings.CutSuffix(column, u.ending); ok && name != "" {
			return strings.ReplaceAll(name, "_", " ") + " (" + u.unit + ")"
		}
	}
	return strings.ReplaceAll(column, "_", " ")
}
