package pages

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"github.com/a-h/templ"

	"distal/experiments/psychometric"
)

// plot draws into an SVG with hairline axes and direct labels. Colours and
// fonts come from the style sheet by class, so that plots follow light and dark.
type plot struct {
	b                        strings.Builder
	width, height            float64 // px
	left, right, top, bottom float64 // margins, px
	x, y                     axis
}

// axis maps values to px.
type axis struct {
	low, high float64
	log       bool
	from, to  float64 // px
}

func (a axis) at(v float64) float64 {
	low, high := a.low, a.high
	if a.log {
		v, low, high = math.Log10(v), math.Log10(low), math.Log10(high)
	}
	share := 0.5
	if high > low {
		share = (v - low) / (high - low)
	}
	return a.from + math.Max(-0.02, math.Min(1.02, share))*(a.to-a.from)
}

// share is the value at a share of the axis.
func (a axis) share(s float64) float64 {
	if a.log {
		return a.low * math.Pow(a.high/a.low, s)
	}
	return a.low + s*(a.high-a.low)
}

// ticks are round values within the axis.
func (a axis) ticks() []float64 {
	var list []float64
	if a.log {
		for e := math.Floor(math.Log10(a.low)); e <= math.Ceil(math.Log10(a.high)); e++ {
			for _, m := range []float64{1, 2, 5} {
				if v := m * math.Pow(10, e); v >= a.low*0.999 && v <= a.high*1.001 {
					list = append(list, v)
				}
			}
		}
		return list
	}
	step := math.Pow(10, math.Floor(math.Log10((a.high-a.low)/2)))
	for _, m := range []float64{1, 2, 5, 10} {
		if (a.high-a.low)/(step*m) <= 5 {
			step *= m
			break
		}
	}
	for v := math.Ceil(a.low/step) * step; v <= a.high+step/1e6; v += step {
		list = append(list, math.Round(v/step)*step)
	}
	return list
}

func newPlot(width, height float64, x, y axis) *plot {
	p := &plot{width: width, height: height, left: 56, right: 16, top: 12, bottom: 44, x: x, y: y}
	p.x.from, p.x.to = p.left, width-p.right
	p.y.from, p.y.to = height-p.bottom, p.top
	return p
}

func (p *plot) printf(format string, args ...any) { fmt.Fprintf(&p.b, format, args...) }

func escape(s string) string { return templ.EscapeString(s) }

// axes draws both axes with ticks and labels.
func (p *plot) axes(xLabel, yLabel string) {
	p.printf(`<path class="axis" d="M%.1f %.1fV%.1fH%.1f"/>`, p.left, p.top, p.height-p.bottom, p.width-p.right)
	last := math.Inf(-1)
	for _, v := range p.x.ticks() {
		at := p.x.at(v)
		p.printf(`<path class="axis" d="M%.1f %.1fv4"/>`, at, p.height-p.bottom)
		if at-last < 30 {
			continue
		}
		last = at
		p.printf(`<text class="tick" x="%.1f" y="%.1f" text-anchor="middle">%s</text>`, at, p.height-p.bottom+17, short(v))
	}
	for _, v := range p.y.ticks() {
		at := p.y.at(v)
		p.printf(`<path class="axis" d="M%.1f %.1fh-4"/><text class="tick" x="%.1f" y="%.1f" text-anchor="end">%s</text>`, p.left, at, p.left-7, at+4, short(v))
	}
	p.printf(`<text class="label" x="%.1f" y="%.1f" text-anchor="middle">%s</text>`, (p.left+p.width-p.right)/2, p.height-6, escape(xLabel))
	p.printf(`<text class="label" transform="translate(13 %.1f) rotate(-90)" text-anchor="middle">%s</text>`, (p.top+p.height-p.bottom)/2, escape(yLabel))
}

func short(v float64) string { return fmt.Sprintf("%.4g", v) }

func (p *plot) svg(description string) templ.Component { return p.svgAs("img", description) }

// svgAs gives the drawing a role: a picture hides what is in it from screen
// readers, a group shows its links.
func (p *plot) svgAs(role, description string) templ.Component {
	return templ.Raw(fmt.Sprintf(`<svg class="plot" viewBox="0 0 %.0f %.0f" width="%.0f" height="%.0f" role="%s" aria-label="%s">%s</svg>`,
		p.width, p.height, p.width, p.height, role, escape(description), p.b.String()))
}

// withUnit is a name with its unit, as axes carry it.
func withUnit(name, unit string) string {
	name = strings.ReplaceAll(name, "_", " ")
	if unit == "" {
		return name
	}
	name = strings.TrimSuffix(strings.TrimSuffix(name, " deg per s"), " deg")
	return name + " (" + unit + ")"
}

// ThresholdPlot collects the thresholds of a study's runs in one condition.
type ThresholdPlot struct {
	Name, Parameter, Unit string
	Linear                bool // scale of the levels
	items                 []ThresholdItem
}

// ThresholdItem is a run's threshold with its interval; OnScale and SE are the
// threshold and its standard error on the scale, in log10 units unless the scale is linear.
type ThresholdItem struct {
	Run                 string
	Value, Low, High    float64
	OnScale, SE         float64
	Excluded, Simulated bool
}

// Add adds a run's threshold.
func (t *ThresholdPlot) Add(item ThresholdItem) { t.items = append(t.items, item) }

// Mean says in words what the runs that are not excluded have in common: the
// random-effects mean of their thresholds with its 95 % interval. ok is false for
// fewer than two.
func (t ThresholdPlot) Mean() (text string, mean float64, ok bool) {
	var y, se []float64
	for _, i := range t.items {
		if !i.Excluded {
			y, se = append(y, i.OnScale), append(se, i.SE)
		}
	}
	g, err := psychometric.SummariseGroup(y, se, 0)
	if err != nil {
		return "", 0, false
	}
	unit := func(x float64) float64 { return x }
	between := fmt.Sprintf("standard deviation between runs %s", short(g.Tau))
	if !t.Linear {
		unit = func(x float64) float64 { return math.Pow(10, x) }
		between = fmt.Sprintf("runs differ by a factor of %s (one standard deviation)", short(unit(g.Tau)))
	}
	m := g.Mean
	return fmt.Sprintf("Mean of %d runs %s [%s, %s]; %s. Random-effects model on the %s scale.",
		g.Count, short(unit(m.Value)), short(unit(m.Interval.Low)), short(unit(m.Interval.High)), between, map[bool]string{true: "linear", false: "log"}[t.Linear]), unit(m.Value), true
}

// Draw draws the runs in order of their thresholds, each with its interval;
// the line is the mean of those that are not excluded.
func (t ThresholdPlot) Draw() templ.Component {
	if len(t.items) == 0 {
		return templ.Raw(`<p class="quiet">No finished run has a threshold yet.</p>`)
	}
	items := slices.Clone(t.items)
	slices.SortFunc(items, func(a, b ThresholdItem) int { return cmp.Compare(a.Value, b.Value) })
	y := levelAxis(t.Linear, 2, items[0].Value, items[len(items)-1].Value)
	p := newPlot(560, 250, axis{low: 0, high: float64(len(items) + 1)}, y)
	p.printf(`<path class="axis" d="M%.1f %.1fV%.1fH%.1f"/>`, p.left, p.top, p.height-p.bottom, p.width-p.right)
	for _, v := range p.y.ticks() {
		at := p.y.at(v)
		p.printf(`<path class="axis" d="M%.1f %.1fh-4"/><text class="tick" x="%.1f" y="%.1f" text-anchor="end">%s</text>`, p.left, at, p.left-7, at+4, short(v))
	}
	p.printf(`<text class="label" x="%.1f" y="%.1f" text-anchor="middle">runs, by threshold</text>`, p.width/2, p.height-14)
	p.printf(`<text class="label" transform="translate(13 %.1f) rotate(-90)" text-anchor="middle">%s</text>`, (p.top+p.height-p.bottom)/2, escape(withUnit(t.Parameter, t.Unit)))
	if _, mean, ok := t.Mean(); ok {
		p.printf(`<path class="mean" d="M%.1f %.1fH%.1f"/><text class="tick" x="%.1f" y="%.1f">mean %s</text>`,
			p.left, p.y.at(mean), p.width-p.right, p.left+6, p.y.at(mean)-5, short(mean))
	}
	for k, i := range items {
		class := "point"
		if i.Excluded {
			class = "point out"
		}
		kind := "human"
		if i.Simulated {
			class += " simulated"
			kind = "simulated"
		}
		x := p.x.at(float64(k + 1))
		p.printf(`<a href="/runs/%s" aria-label="%s run, threshold %s"><path class="bar" d="M%.1f %.1fV%.1f"/><circle class="%s" cx="%.1f" cy="%.1f" r="4"/></a>`,
			i.Run, kind, short(i.Value), x, p.y.at(math.Max(i.Low, y.low)), p.y.at(math.Min(i.High, y.high)), class, x, p.y.at(i.Value))
	}
	return p.svgAs("group", fmt.Sprintf("Thresholds of %d runs, %s", len(items), t.Name))
}

// levelAxis spans levels with room around them: a factor on a log scale, as much
// of the span on a linear one.
func levelAxis(linear bool, room, low, high float64) axis {
	if !linear && low > 0 {
		return axis{low: low / room, high: high * room, log: true}
	}
	margin := math.Max((room-1)*(high-low), 1e-3*math.Max(math.Abs(low), math.Abs(high)))
	if margin == 0 {
		margin = 1
	}
	return axis{low: low - margin, high: high + margin}
}

// Trace draws the levels of the trials: filled are those right or answered as counted.
func (r RunPlot) Trace() templ.Component {
	if len(r.Levels) == 0 {
		return templ.Raw(`<p class="quiet">There are no trials yet.</p>`)
	}
	low, high := slices.Min(r.Levels), slices.Max(r.Levels)
	p := newPlot(560, 240, axis{low: 0, high: float64(len(r.Levels) + 1)}, levelAxis(r.Linear, 1.15, low, high))
	if r.Known {
		p.printf(`<path class="mean" d="M%.1f %.1fH%.1f"/>`, p.left, p.y.at(r.Threshold), p.width-p.right)
		p.printf(`<text class="tick" x="%.1f" y="%.1f" text-anchor="end">%s</text>`, p.width-p.right, p.y.at(r.Threshold)-5, strings.ToLower(r.Caption))
	}
	p.axes("trial", withUnit(r.Parameter, r.Unit))
	var path strings.Builder
	for i, level := range r.Levels {
		command := "L"
		if i == 0 {
			command = "M"
		}
		fmt.Fprintf(&path, "%s%.1f %.1f", command, p.x.at(float64(i+1)), p.y.at(level))
	}
	for i, e := range r.Estimates {
		if x := p.x.at(float64(i + 1)); e.Known {
			p.printf(`<path class="standing" d="M%.1f %.1fV%.1fM%.1f %.1fH%.1f"/>`, x, p.y.at(e.Low), p.y.at(e.High), x-2, p.y.at(e.Threshold), x+2)
		}
	}
	p.printf(`<path class="line" d="%s"/>`, path.String())
	for i, level := range r.Levels {
		class := "point"
		if !r.Correct[i] {
			class = "point wrong"
		}
		p.printf(`<circle class="%s" cx="%.1f" cy="%.1f" r="3"/>`, class, p.x.at(float64(i+1)), p.y.at(level))
	}
	return p.svg("Levels of the trials, " + r.Name + ": " + r.Marks)
}

// Function draws the fitted psychometric function with its data; the area of a
// point is the number of its trials.
func (r RunPlot) Function() templ.Component {
	if len(r.Points) == 0 {
		return templ.Raw("")
	}
	low, high := math.Inf(1), math.Inf(-1)
	for _, point := range r.Points {
		low, high = math.Min(low, point.X), math.Max(high, point.X)
	}
	x := levelAxis(r.Linear, 1.2, low, high)
	p := newPlot(560, 260, x, axis{low: 0, high: 1})
	p.axes(withUnit(r.Parameter, r.Unit), r.YLabel)
	if r.Known {
		from, to := math.Max(r.Low, x.low), math.Min(r.High, x.high)
		p.printf(`<path class="interval" d="M%.1f %.1fH%.1f"/>`, p.x.at(from), p.y.at(0.03), p.x.at(to))
		p.printf(`<path class="mean" d="M%.1f %.1fV%.1f"/><text class="tick" x="%.1f" y="%.1f">%s %s, 95 %% interval</text>`,
			p.x.at(r.Threshold), p.y.at(0), p.y.at(1), p.x.at(r.Threshold)+6, p.y.at(0.07), strings.ToLower(r.Caption), short(r.Threshold))
	}
	if r.Predict != nil {
		var path strings.Builder
		const n = 160
		for i := range n + 1 {
			at := x.share(float64(i) / n)
			y := r.Predict(at)
			if math.IsNaN(y) {
				continue
			}
			command := "L"
			if path.Len() == 0 {
				command = "M"
			}
			fmt.Fprintf(&path, "%s%.1f %.1f", command, p.x.at(at), p.y.at(y))
		}
		p.printf(`<path class="curve" d="%s"/>`, path.String())
	}
	for _, point := range r.Points {
		p.printf(`<circle class="point" cx="%.1f" cy="%.1f" r="%.1f"><title>%d of %d at %s</title></circle>`,
			p.x.at(point.X), p.y.at(float64(point.K)/float64(point.N)), 1.5+1.3*math.Sqrt(float64(point.N)), point.K, point.N, short(point.X))
	}
	return p.svg("Psychometric function, " + r.Name)
}

// Histogram draws how often values fall into equal bins.
func Histogram(values []float64, label string, low, high float64, bins int) templ.Component {
	if len(values) == 0 {
		return templ.Raw(`<p class="quiet">Nothing was measured yet.</p>`)
	}
	counts := make([]int, bins)
	most, outside := 1, 0
	for _, v := range values {
		i := int((v - low) / (high - low) * float64(bins))
		if i < 0 || i >= bins {
			outside++
			continue
		}
		counts[i]++
		most = max(most, counts[i])
	}
	p := newPlot(560, 200, axis{low: low, high: high}, axis{low: 0, high: float64(most)})
	p.axes(label, "count")
	for i, n := range counts {
		if n == 0 {
			continue
		}
		a := p.x.at(low + (high-low)*float64(i)/float64(bins))
		b := p.x.at(low + (high-low)*float64(i+1)/float64(bins))
		p.printf(`<rect class="fill" x="%.1f" y="%.1f" width="%.1f" height="%.1f"/>`, a, p.y.at(float64(n)), math.Max(1, b-a-1), p.y.at(0)-p.y.at(float64(n)))
	}
	if outside > 0 {
		p.printf(`<text class="tick" x="%.1f" y="%.1f" text-anchor="end">%d beyond this range</text>`, p.width-p.right, p.top+10, outside)
	}
	return p.svg(label)
}

// IntervalHistogram draws the frame intervals of a run up to 3.5 of their median.
func IntervalHistogram(intervalsMs []float64) templ.Component {
	if len(intervalsMs) == 0 {
		return Histogram(nil, "", 0, 1, 1)
	}
	sorted := slices.Sorted(slices.Values(intervalsMs))
	return Histogram(intervalsMs, "frame interval (ms)", 0, 3.5*sorted[len(sorted)/2], 70)
}

// quotaValue is what stands in the field of a quota.
func quotaValue(quota string) string {
	if quota == "no limit" {
		return "0"
	}
	return quota
}

// shareBar draws a share as a bar.
func shareBar(share float64) templ.Component {
	return templ.Raw(fmt.Sprintf(`<svg class="share" width="160" height="10" role="img" aria-label="%.0f %%"><rect class="rest" width="160" height="10"/><rect class="fill" width="%.1f" height="10"/></svg>`, 100*share, 160*share))
}
