// Package inspecting computes from a study's frames what participants will
// physically see: which way the signal points at each level, how motion is cut into
// frames, flashes, stripes and grey levels; and writes it as a page.
package inspecting

import (
	"context"
	"fmt"
	"math"
	"runtime"
	"sync"

	"golang.org/x/sync/errgroup"

	"distal/experiments/display"
	"distal/experiments/inspection"
	"distal/experiments/procedure"
	"distal/experiments/study"
)

// Settings of an inspection.
type Settings struct {
	RefreshHz []float64
	PxPerDeg  float64
	Levels    int // of each procedure: lowest, highest and between
	Seeds     int // trials whose motion energy is averaged
}

// Usual are the settings of the command.
func Usual() Settings {
	return Settings{RefreshHz: []float64{60, 120}, PxPerDeg: 40, Levels: 5, Seeds: 3}
}

// Check says what is wrong with the settings.
func (s Settings) Check() error {
	if len(s.RefreshHz) == 0 || len(s.RefreshHz) > 4 {
		return fmt.Errorf("from one to four refresh rates can be inspected, not %d", len(s.RefreshHz))
	}
	for _, hz := range s.RefreshHz {
		if !(hz >= 20 && hz <= 500) {
			return fmt.Errorf("a refresh rate is from 20 to 500 Hz, not %g", hz)
		}
	}
	if !(s.PxPerDeg >= 5 && s.PxPerDeg <= 120) {
		return fmt.Errorf("pixels per degree are from 5 to 120, not %g", s.PxPerDeg)
	}
	if s.Levels < 1 || s.Levels > 20 || s.Seeds < 1 || s.Seeds > 50 {
		return fmt.Errorf("from 1 to 20 levels and 1 to 50 seeds can be inspected")
	}
	return nil
}

// Condition is one block's display with one set of values.
type Condition struct {
	Block, Name, Display, Kind string
	Parameter, Unit            string // varied, "" for none
	kind                       *display.Kind
	values                     display.Values
	levels                     []float64
	durationMs                 float64
	parameter                  int // index in the kind's, −1 for none
	whole                      inspection.Screen
}

// longestMs is how much of a longer stimulus is looked at.
const longestMs = 5000

// Conditions are what a study shows, practice left out: one for each block and
// condition, with the first of the balanced values.
func Conditions(s *study.Study, levels int) []Condition {
	var out []Condition
	for i := range s.Blocks {
		b := &s.Blocks[i]
		if b.Kind != study.Measurement {
			continue
		}
		task := &s.Tasks[b.Task]
		d := &s.Displays[task.Display]
		sets := []study.Condition{{}}
		if len(b.Conditions) > 0 {
			sets = b.Conditions
		}
		for _, set := range sets {
			c := Condition{
				Block: b.Name, Name: set.Name, Display: d.Name, Kind: d.Kind.Name, kind: d.Kind, values: d.Values.Clone(),
				durationMs: math.Min(task.StimulusMs, longestMs), parameter: -1, whole: wholeScreen(s),
			}
			for _, list := range [][]study.Setting{b.Fixed, set.Set, study.Crossing(b.Balance, 0)} {
				for _, x := range list {
					c.values[d.Kind.Index(x.Key)][0] = x.Value
				}
			}
			if b.Procedure >= 0 {
				p := &s.Procedures[b.Procedure].Spec
				c.parameter = d.Kind.Index(p.Parameter)
				c.Parameter, c.Unit = p.Parameter, d.Kind.Params[c.parameter].Unit
				c.levels = spread(p, levels)
			}
			out = append(out, c)
		}
	}
	return out
}

// wholeScreen is the smallest that a participant may have: that of a laptop of 13 inches
// at 57 cm (common practice, no source), or what the study asks for.
func wholeScreen(s *study.Study) inspection.Screen {
	return inspection.NewScreen(math.Max(28, s.Screen.MinWidthDeg), math.Max(18, s.Screen.MinHeightDeg), 12, s.Screen.BackgroundFraction)
}

// spread are n levels of a procedure evenly on its scale.
func spread(p *procedure.Spec, n int) []float64 {
	if p.Method == procedure.Constant && len(p.Levels) > 0 {
		return p.Levels
	}
	var list []float64
	for i := range n {
		share := 0.5
		if n > 1 {
			share = float64(i) / float64(n-1)
		}
		if p.Scale == procedure.Log10 && p.Min > 0 {
			list = append(list, p.Min*math.Pow(p.Max/p.Min, share))
		} else {
			list = append(list, p.Min+share*(p.Max-p.Min))
		}
	}
	return list
}

// at are the condition's values with a level put in.
func (c *Condition) at(level float64) display.Values {
	v := c.values.Clone()
	if c.parameter >= 0 && !math.IsNaN(level) {
		if c.kind.Params[c.parameter].Type == display.Integer {
			level = math.Round(level)
		}
		v[c.parameter][0] = level
	}
	return v
}

// all are the condition's levels, NaN alone where nothing is varied.
func (c *Condition) all() []float64 {
	if len(c.levels) == 0 {
		return []float64{math.NaN()}
	}
	return c.levels
}

// DirectionDeg is that of the motion: the direction parameter, rightwards without one.
func (c *Condition) DirectionDeg() float64 {
	for _, key := range []string{"direction_deg", "drift_deg"} {
		if i := c.kind.Index(key); i >= 0 && len(c.values[i]) > 0 {
			return c.values[i][0]
		}
	}
	return 0
}

// frequencyCPD is the spatial frequency at which motion energy is measured: the
// grating's own, 1 c/deg for dots.
func (c *Condition) frequencyCPD() float64 {
	for _, key := range []string{"spatial_frequency_cpd", "spatial_frequencies_cpd"} {
		if i := c.kind.Index(key); i >= 0 && len(c.values[i]) > 0 && c.values[i][0] > 0 {
			return c.values[i][0]
		}
	}
	return 1
}

// frames shows a trial and hands every frame to see, whose list is valid until it returns.
func (c *Condition) frames(v display.Values, seed uint64, refreshHz float64, see func(i int, atMs float64, l *display.List)) int {
	interval := 1000 / refreshHz
	n := max(1, int(math.Round(c.durationMs/interval)))
	d := c.kind.New(v)
	l := display.NewList(d.Size())
	d.Begin(display.Trial{Values: v, Seed: seed, Number: 1, IntervalMs: interval})
	for i := range n {
		l.Reset()
		d.Step(min(i, 1), l)
		see(i, float64(i)*interval, l)
	}
	return n
}

// Level is what one level of a condition physically is.
type Level struct {
	Level    float64 // NaN where nothing is varied
	Energy   float64 // net motion energy along the motion, −1 to 1, mean over seeds
	EnergySD float64 // between seeds
	Detector float64 // elaborated correlation detector, arbitrary units, mean over seeds
	Peak     inspection.Peak
	HasPeak  bool
	Greys    int
	Contrast float64 // Michelson, of the 8-bit frames
}

// Rate is what a condition is at one refresh rate.
type Rate struct {
	RefreshHz float64
	Sampling  inspection.Sampling // at the highest level
	Levels    []Level
	Flashes   inspection.FlashVerdict // the worst of all levels
	Stripes   inspection.Stripes      // the worst of all levels
	whole     inspection.Screen       // of which stripes cover a share
}

// Finding is everything about one condition.
type Finding struct {
	Condition
	DirectionDeg float64
	WidthDeg     float64
	HeightDeg    float64
	Rates        []Rate
	Pictures     Pictures
}

// Inspection is everything about a study.
type Inspection struct {
	Study, Title string
	Settings
	Findings []Finding
	Approval string // flash_approval of the study
}

// Inspect looks at every condition of a study. progress is told the share done.
func Inspect(ctx context.Context, s *study.Study, o Settings, progress func(share float64)) (*Inspection, error) {
	if err := o.Check(); err != nil {
		return nil, err
	}
	out := &Inspection{Study: s.About.Name, Title: s.About.Title, Settings: o, Approval: s.About.FlashApproval}
	conditions := Conditions(s, o.Levels)
	done, all := 0, len(conditions)*(len(o.RefreshHz)+1)
	var lock sync.Mutex
	tick := func() {
		lock.Lock()
		defer lock.Unlock()
		done++
		if progress != nil {
			progress(float64(done) / float64(all))
		}
	}
	out.Findings = make([]Finding, len(conditions))
	var group errgroup.Group
	group.SetLimit(runtime.GOMAXPROCS(0))
	for i, c := range conditions {
		f := &out.Findings[i]
		*f = Finding{Condition: c, DirectionDeg: c.DirectionDeg(), Rates: make([]Rate, len(o.RefreshHz))}
		f.WidthDeg, f.HeightDeg = c.kind.Extent(c.values)
		screen := c.screen(o.PxPerDeg, s.Screen.BackgroundFraction)
		for k, hz := range o.RefreshHz {
			group.Go(func() error {
				if ctx.Err() == nil {
					f.Rates[k] = c.rate(screen, hz, o.Seeds)
				}
				tick()
				return ctx.Err()
			})
		}
		group.Go(func() error {
			levels := c.all()
			if ctx.Err() == nil {
				f.Pictures = c.pictures(screen, levels[len(levels)/2], o.RefreshHz[0], f.DirectionDeg)
			}
			tick()
			return ctx.Err()
		})
	}
	if err := group.Wait(); err != nil {
		return nil, err
	}
	return out, nil
}

// screen shows the condition with some room, and at least a field of ten degrees,
// in which flashes are judged.
func (c *Condition) screen(pxPerDeg, background float64) inspection.Screen {
	width, height := c.kind.Extent(c.values)
	room := func(x float64) float64 { return math.Min(60, math.Max(10, 1.05*x)) }
	return inspection.NewScreen(room(width), room(height), pxPerDeg, background)
}

const (
	cutDeg    = 1.0 / 24 // between places of a cut
	mostSteps = 720      // places of a cut
	energyMs  = 1000.0   // the end of a longer stimulus, of which motion energy is measured
)

func (c *Condition) rate(screen inspection.Screen, hz float64, seeds int) Rate {
	r := Rate{RefreshHz: hz, whole: c.whole}
	levels := c.all()
	top := c.at(levels[len(levels)-1])
	r.Sampling = inspection.MeasureSampling(c.kind, top, display.Trial{Seed: 1, Number: 1, IntervalMs: 1000 / hz}, screen, min(40, max(2, int(c.durationMs*hz/1000))))
	raster := inspection.NewRaster(screen)
	r.Flashes.Passes = true
	for _, level := range levels {
		l := c.level(raster, level, hz, seeds, &r)
		r.Levels = append(r.Levels, l)
	}
	return r
}

// level measures one level; the first trial's flashes and stripes go to r.
func (c *Condition) level(raster *inspection.Raster, level, hz float64, seeds int, r *Rate) Level {
	out := Level{Level: level}
	v := c.at(level)
	width, height := c.kind.Extent(v)
	n := min(mostSteps, max(8, int(math.Max(width, height)/cutDeg)))
	var nets []float64
	var detectors float64
	dots := false
	direction := c.DirectionDeg()
	sin, cos := math.Sincos(direction * math.Pi / 180)
	grey := make([]uint8, len(raster.Light))
	from := c.durationMs - energyMs - 1e-6
	for seed := range seeds {
		if seed > 0 && !dots {
			break // the same frames again
		}
		cuts := make([]inspection.SpaceTime, 3)
		for k := range cuts {
			cuts[k] = inspection.SpaceTime{StepDeg: cutDeg, IntervalMs: 1000 / hz}
		}
		flashes := inspection.NewFlashCheck(raster.Screen)
		stripes := inspection.NewStripeCheck(r.whole)
		frames := c.frames(v, uint64(seed)+1, hz, func(i int, atMs float64, l *display.List) {
			dots = dots || len(l.Dots) > 0
			if seed > 0 && atMs < from {
				return
			}
			raster.Draw(l)
			for k := range cuts { // beside the centre and through it
				if atMs < from {
					break
				}
				off := (float64(k) - 1) * 0.25 * math.Min(width, height)
				cuts[k].Light = append(cuts[k].Light, raster.Cut(-off*sin, off*cos, direction, cutDeg, n))
			}
			if seed > 0 {
				return
			}
			flashes.Add(raster.Light, atMs)
			stripes.Add(l, atMs)
			if i == 0 {
				raster.Grey(grey)
				out.Greys, out.Contrast = inspection.GreyLevels(grey)
			}
		})
		var e inspection.Energy
		for _, cut := range cuts {
			e = e.Add(inspection.MotionEnergy(cut, c.frequencyCPD()))
			detectors += inspection.ElaboratedDetector(cut, c.frequencyCPD(), 30) / 3
		}
		nets = append(nets, e.Net())
		if seed == 0 && frames > 1 {
			out.Peak, out.HasPeak = inspection.SpectrumPeak(cuts[1])
			r.worst(flashes.Verdict(), stripes.Verdict(1000/hz))
		}
	}
	for _, x := range nets {
		out.Energy += x / float64(len(nets))
	}
	out.Detector = detectors / float64(len(nets))
	for _, x := range nets {
		out.EnergySD += (x - out.Energy) * (x - out.Energy) / math.Max(1, float64(len(nets)-1))
	}
	out.EnergySD = math.Sqrt(out.EnergySD)
	return out
}

func (r *Rate) worst(f inspection.FlashVerdict, s inspection.Stripes) {
	if f.WorstShare > r.Flashes.WorstShare || f.Transitions > r.Flashes.Transitions && f.WorstShare >= r.Flashes.WorstShare {
		r.Flashes = f
	}
	if s.Exceeds() && !r.Stripes.Exceeds() || s.Exceeds() == r.Stripes.Exceeds() && s.Pairs > r.Stripes.Pairs {
		r.Stripes = s
	}
}

// Hazard says in a sentence why a study must not be launched without approval, ""
// if nothing is against it.
func (in *Inspection) Hazard() string {
	for _, f := range in.Findings {
		for _, r := range f.Rates {
			if text := r.hazard(); text != "" {
				name := f.Block
				if f.Name != "" {
					name += ", " + f.Name
				}
				return fmt.Sprintf("block %s at %g Hz: %s", name, r.RefreshHz, text)
			}
		}
	}
	return ""
}

func (r *Rate) hazard() string {
	if !r.Flashes.Passes {
		return fmt.Sprintf("more than three general flashes within a second over %.0f %% of a field of 10°, at %.0f ms (WCAG 2.3.1 allows them over less than 25 %%)", 100*r.Flashes.WorstShare, r.Flashes.WorstMs)
	}
	if r.Stripes.Exceeds() {
		return r.Stripes.String() + " (Harding et al. 2005)"
	}
	return ""
}

// Hazards looks for flashes and stripes alone, coarsely and at the extreme levels: what
// a launch waits for.
func Hazards(ctx context.Context, s *study.Study) (string, error) {
	for _, c := range Conditions(s, 2) {
		screen := c.screen(12, s.Screen.BackgroundFraction)
		raster := inspection.NewRaster(screen)
		for _, level := range c.all() {
			if err := ctx.Err(); err != nil {
				return "", err
			}
			r := Rate{RefreshHz: 60}
			flashes, stripes := inspection.NewFlashCheck(screen), inspection.NewStripeCheck(c.whole)
			c.frames(c.at(level), 1, 60, func(_ int, atMs float64, l *display.List) {
				raster.Draw(l)
				flashes.Add(raster.Light, atMs)
				stripes.Add(l, atMs)
			})
			r.Flashes.Passes = true
			r.worst(flashes.Verdict(), stripes.Verdict(1000.0/60))
			if text := r.hazard(); text != "" {
				return (&Inspection{Findings: []Finding{{Condition: c, Rates: []Rate{r}}}}).Hazard(), nil
			}
		}
	}
	return "", nil
}
