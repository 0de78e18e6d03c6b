package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of apparent, in the order of apparentKind.Params.
const (
	apparentArrangement = iota
	apparentStations
	apparentLength
	apparentDirection
	apparentOrder
	apparentWidth
	apparentRatio
	apparentFlash
	apparentGap
	apparentSmooth
	apparentAlternate
	apparentDiameter
	apparentContrast
)

const (
	orderBackAndForth = iota
	orderRestart
	orderOnce
)

var apparentKind = &Kind{
	Name: "apparent",
	Doc: "Apparent motion (Wertheimer 1912, Z Psychol 61:161): a disc flashes at successive stations of a path, or the four-disc quartet " +
		"(Gengerelli 1948, J Exp Psychol 38:592) flashes its two diagonals in turn, seen moving up and down or from side to side.",
	Params: []Param{
		apparentArrangement: {Key: "arrangement", Doc: "one path, or the quartet with its two competing paths", Type: Choice, Options: []string{"path", "quartet"}, Default: []float64{0}},
		apparentStations:    {Key: "stations", Doc: "places on the path, 2 is two-stroke motion", Type: Integer, Min: 2, Max: 64, Default: []float64{2}},
		apparentLength:      {Key: "path_deg", Unit: "deg", Doc: "from the first station to the last", Min: 0, Max: 100, Default: []float64{3}},
		apparentDirection:   {Key: "direction_deg", Unit: "deg", Doc: "of the path, counter-clockwise from rightwards; turns the quartet", Min: -360, Max: 360, Default: []float64{0}, Circular: true},
		apparentOrder:       {Key: "order", Doc: "back and forth, from the start again, or once", Type: Choice, Options: []string{"back_and_forth", "restart", "once"}, Default: []float64{0}},
		apparentWidth:       {Key: "quartet_width_deg", Unit: "deg", Doc: "horizontal distance of the quartet's discs", Min: 0.1, Max: 50, Default: []float64{3}},
		apparentRatio:       {Key: "aspect_ratio", Doc: "vertical over horizontal distance of the quartet's discs", Min: 0.1, Max: 10, Default: []float64{1.25}},
		apparentFlash:       {Key: "flash_ms", Unit: "ms", Doc: "how long each flash lasts", Min: 1, Max: 5000, Default: []float64{100}},
		apparentGap:         {Key: "interval_ms", Unit: "ms", Doc: "from the end of a flash to the next, empty", Min: 0, Max: 5000, Default: []float64{50}},
		apparentSmooth:      {Key: "smooth", Doc: "the same path with the same mean speed, moved at every refresh", Type: Boolean, Default: []float64{0}},
		apparentAlternate:   {Key: "alternate_contrast", Doc: "contrast changes sign from flash to flash (Anstis 1970, Vision Res 10:1411)", Type: Boolean, Default: []float64{0}},
		apparentDiameter:    {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of the disc", Min: 0.01, Max: 20, Default: []float64{0.6}},
		apparentContrast:    {Key: "contrast", Doc: "Weber contrast of the disc", Min: -1, Max: 1, Default: []float64{0.9}},
	},
	Check: func(v Values, problem func(key, message string)) {
		if v.On(apparentSmooth) && v.Choice(apparentArrangement) == 1 {
			problem("smooth", "the quartet has no single path to move along: use arrangement: path")
		}
		if v.On(apparentSmooth) && v.On(apparentAlternate) {
			problem("alternate_contrast", "smooth motion has no flashes to alternate")
		}
	},
	Extent: func(v Values) (float64, float64) {
		size := v.Num(apparentLength)
		if v.Choice(apparentArrangement) == 1 {
			w := v.Num(apparentWidth)
			size = exact.Hypot(w, float64(w*v.Num(apparentRatio)))
		}
		return size + v.Num(apparentDiameter), size + v.Num(apparentDiameter)
	},
	New: func(Values) Display { return &apparent{} },
}

type apparent struct {
	v          Values
	x, y       float64
	sin, cos   float64
	flash, gap int // refresh intervals
	interval   float64
	frame      int
	first      int // diagonal of the quartet at onset
}

func (a *apparent) Size() (dots, patches, batches int) { return 2, 0, 1 }

func (a *apparent) Begin(t Trial) {
	a.v, a.x, a.y, a.frame, a.interval = t.Values, t.XDeg, t.YDeg, 0, t.IntervalMs
	a.sin, a.cos = exact.SinCos(exact.Radians(a.v.Num(apparentDirection)))
	a.flash = holdFrames(a.v.Num(apparentFlash), t.IntervalMs)
	a.gap = int(exact.Round(a.v.Num(apparentGap) / t.IntervalMs))
	s := random.NewSub(t.Seed, t.Number, random.PurposePhase, t.Place)
	a.first = s.Intn(2)
}

func (a *apparent) Step(n int, l *List) {
	a.frame += n
	period := a.flash + a.gap
	stroke, within := a.frame/period, a.frame%period
	if a.v.On(apparentSmooth) {
		a.add(a.along(float64(a.frame)/float64(period)), 0, 1, l)
		return
	}
	if within >= a.flash {
		return
	}
	sign := 1.0
	if a.v.On(apparentAlternate) && stroke%2 == 1 {
		sign = -1
	}
	if a.v.Choice(apparentArrangement) == 1 {
		w := a.v.Num(apparentWidth) / 2
		h := float64(w * a.v.Num(apparentRatio))
		if (stroke+a.first)%2 == 1 {
			h = -h
		}
		a.add(-w, -h, sign, l)
		a.add(w, h, sign, l)
		return
	}
	if a.v.Choice(apparentOrder) == orderOnce && stroke >= int(a.v.Num(apparentStations)) {
		return
	}
	a.add(a.along(float64(stroke)), 0, sign, l)
}

// along is the place on the path after so many strokes, whole or not.
func (a *apparent) along(strokes float64) float64 {
	last := a.v.Num(apparentStations) - 1
	at := strokes
	switch a.v.Choice(apparentOrder) {
	case orderBackAndForth:
		at -= float64(2 * last * math.Floor(at/(2*last)))
		if at > last {
			at = float64(2*last) - at
		}
	case orderRestart:
		// Smooth motion jumps back from the last station, as the flashes do.
		if a.v.On(apparentSmooth) {
			at -= float64(last * math.Floor(at/last))
		} else {
			at -= float64((last + 1) * math.Floor(at/(last+1)))
		}
	default:
		at = min(at, last)
	}
	return float64(a.v.Num(apparentLength) * (at/last - 0.5))
}

func (a *apparent) add(u, v, sign float64, l *List) {
	l.AddDot(Dot{
		float32(a.x + float64(u*a.cos) - float64(v*a.sin)), float32(a.y + float64(u*a.sin) + float64(v*a.cos)),
		float32(a.v.Num(apparentDiameter)), float32(sign * a.v.Num(apparentContrast)),
	})
}

func (a *apparent) Truths(add func(name string, value float64)) {
	onset := float64(float64(a.flash+a.gap) * a.interval)
	add("flash_ms", float64(float64(a.flash)*a.interval))
	add("onset_asynchrony_ms", onset)
	if a.v.Choice(apparentArrangement) == 1 {
		add("first_diagonal", float64(a.first))
		return
	}
	step := a.v.Num(apparentLength) / (a.v.Num(apparentStations) - 1)
	add("step_deg", step)
	add("speed_deg_per_s", 1000*step/onset)
}
