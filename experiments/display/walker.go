package display

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// Parameters of walker, in the order of walkerKind.Params.
const (
	walkerHeight = iota
	walkerAzimuth
	walkerFacing
	walkerCycle
	walkerPhase
	walkerOrientation
	walkerArrangement
	walkerDiameter
	walkerContrast
	walkerMaskDots
	walkerMaskWidth
	walkerMaskHeight
	walkerNoise
)

// maxMaskDots is the most mask dots that a study can ask for.
const maxMaskDots = 400

var walkerKind = &Kind{
	Name: "walker",
	Doc: "Point-light walker of thirteen markers (Johansson 1973, Percept Psychophys 14:201), synthesised from published normative " +
		"gait kinematics (Fukuchi, Fukuchi and Duarte 2018, PeerJ 6:e4640), seen in parallel projection, walking in place.",
	Params: []Param{
		walkerHeight:      {Key: "height_deg", Unit: "deg", Doc: "stature", Min: 0.5, Max: 60, Default: []float64{8}},
		walkerAzimuth:     {Key: "azimuth_deg", Unit: "deg", Doc: "turn away from facing the viewer: 0 faces the viewer, 90 is a profile", Min: 0, Max: 180, Default: []float64{90}},
		walkerFacing:      {Key: "facing", Doc: "the side to which the walker is turned, as the viewer sees it", Type: Choice, Options: []string{"right", "left"}, Default: []float64{0}},
		walkerCycle:       {Key: "cycle_ms", Unit: "ms", Doc: "duration of a gait cycle of two steps; usual walking takes about 1029 (Murtagh et al. 2021, Sports Med 51:125)", Min: 200, Max: 10000, Default: []float64{1029}},
		walkerPhase:       {Key: "phase", Doc: "share of the cycle at onset, 0 at the right heel's contact; −1: random in each trial", Min: -1, Max: 1, Default: []float64{-1}},
		walkerOrientation: {Key: "orientation", Doc: "upright or turned upside down", Type: Choice, Options: []string{"upright", "inverted"}, Default: []float64{0}},
		walkerArrangement: {Key: "arrangement", Doc: "intact, or scrambled: each dot keeps its own path and moves its origin to a random place within the figure", Type: Choice, Options: []string{"intact", "scrambled"}, Default: []float64{0}},
		walkerDiameter:    {Key: "dot_diameter_deg", Unit: "deg", Doc: "diameter of a dot", Min: 0.01, Max: 5, Default: []float64{0.2}},
		walkerContrast:    {Key: "contrast", Doc: "Weber contrast of the dots", Min: -1, Max: 1, Default: []float64{1}},
		walkerMaskDots:    {Key: "mask_dots", Doc: "mask of scrambled walker dots (Cutting, Moore and Morrison 1988, Percept Psychophys 44:339): paths of random markers at random places and phases, half of them from walkers facing each side", Type: Integer, Min: 0, Max: maxMaskDots, Default: []float64{0}},
		walkerMaskWidth:   {Key: "mask_width_deg", Unit: "deg", Doc: "width of the area of the mask dots' origins", Min: 0.1, Max: 100, Default: []float64{8}},
		walkerMaskHeight:  {Key: "mask_height_deg", Unit: "deg", Doc: "height of that area", Min: 0.1, Max: 100, Default: []float64{10}},
		walkerNoise:       {Key: "position_noise_deg", Unit: "deg", Doc: "standard deviation of a random displacement of each dot's origin, in each direction, drawn once a trial", Min: 0, Max: 20, Default: []float64{0}},
	},
	Check: func(Values, func(key, message string)) {},
	Extent: func(v Values) (float64, float64) {
		// The widest pose spans 0.55 of stature, from wrist to ankle; scrambling keeps to that box.
		width, height := float64(0.7*v.Num(walkerHeight)), v.Num(walkerHeight)
		if v.Num(walkerMaskDots) > 0 {
			width = max(width, v.Num(walkerMaskWidth)+float64(0.5*v.Num(walkerHeight)))
			height = max(height, v.Num(walkerMaskHeight)+float64(0.2*v.Num(walkerHeight)))
		}
		return width, height
	},
	New: func(Values) Display { return newWalker() },
}

// samples of the gait cycle; between them markers move on straight lines, which
// are off by less than 0.0001 of stature.
const samples = 256

// walker is a point-light walker with its mask.
type walker struct {
	v     Values
	cycle [samples][markerCount]point
	mean  [markerCount]point

	interval, elapsed float64 // ms
	phase             float64
	x, y              float64
	origin            [markerCount][2]float64 // shift of each marker's path, deg
	mask              [maxMaskDots]maskDot
	masks             int
	sin, cos          float64 // of the signed azimuth
	flip              float64
}

// maskDot is a marker's path somewhere else.
type maskDot struct {
	marker int
	phase  float64
	side   float64 // +1 as seen facing right, −1 left
	x, y   float64
}

func newWalker() *walker {
	w := &walker{}
	for i := range w.cycle {
		walkerAt(float64(i)/samples, &w.cycle[i])
		for m := range w.mean {
			p := w.cycle[i][m]
			w.mean[m].forward += p.forward / samples
			w.mean[m].up += p.up / samples
			w.mean[m].right += p.right / samples
		}
	}
	return w
}

func (w *walker) Size() (dots, patches, batches int) { return markerCount + maxMaskDots, 0, 1 }

func (w *walker) Begin(t Trial) {
	w.v, w.interval, w.elapsed = t.Values, t.IntervalMs, 0
	w.x, w.y = t.XDeg, t.YDeg
	azimuth := exact.Radians(w.v.Num(walkerAzimuth))
	if w.v.Choice(walkerFacing) == 1 {
		azimuth = -azimuth
	}
	w.sin, w.cos = exact.SinCos(azimuth)
	w.flip = 1
	if w.v.Choice(walkerOrientation) == 1 {
		w.flip = -1
	}
	w.phase = w.v.Num(walkerPhase)
	if w.phase < 0 {
		s := random.NewSub(t.Seed, t.Number, random.PurposePhase, t.Place)
		w.phase = s.Float64()
	}
	w.arrange(random.NewSub(t.Seed, t.Number, random.PurposeScramble, t.Place))
	w.drawMask(random.NewSub(t.Seed, t.Number, random.PurposeMask, t.Place))
}

// arrange moves the origins of scrambled and noisy dots.
func (w *walker) arrange(s random.Stream) {
	height := w.v.Num(walkerHeight)
	noise := w.v.Num(walkerNoise)
	for m := range w.origin {
		w.origin[m] = [2]float64{}
		if w.v.Choice(walkerArrangement) == 1 {
			x, y := w.project(w.mean[m], w.sin, w.cos)
			w.origin[m][0] = float64(s.Range(-0.25, 0.25)*height) - x
			w.origin[m][1] = float64(s.Range(-0.45, 0.45)*height) - y
		}
		if noise > 0 {
			w.origin[m][0] += float64(noise * s.Normal())
			w.origin[m][1] += float64(noise * s.Normal())
		}
	}
}

func (w *walker) drawMask(s random.Stream) {
	w.masks = int(w.v.Num(walkerMaskDots))
	width, height := w.v.Num(walkerMaskWidth), w.v.Num(walkerMaskHeight)
	for i := range w.mask[:w.masks] {
		side := 1.0
		if i%2 == 1 {
			side = -1
		}
		w.mask[i] = maskDot{
			marker: s.Intn(markerCount), phase: s.Float64(), side: side,
			x: s.Range(-width/2, width/2), y: s.Range(-height/2, height/2),
		}
	}
}

// project gives the place on the screen in degrees about the figure's middle:
// forward points to the viewer's right by the sine of the azimuth, the walker's
// right to the viewer's left by its cosine.
func (w *walker) project(p point, sin, cos float64) (x, y float64) {
	height := w.v.Num(walkerHeight)
	x = float64(height * (float64(p.forward*sin) - float64(p.right*cos)))
	return x, float64(height * (p.up - 0.5) * w.flip)
}

// marker is marker m at a phase of the cycle.
func (w *walker) marker(m int, phase float64) point {
	at := float64((phase - math.Floor(phase)) * samples)
	i := int(at)
	share := at - float64(i)
	a, b := &w.cycle[i%samples][m], &w.cycle[(i+1)%samples][m]
	return point{
		a.forward + float64(share*(b.forward-a.forward)),
		a.up + float64(share*(b.up-a.up)),
		a.right + float64(share*(b.right-a.right)),
	}
}

func (w *walker) Step(n int, l *List) {
	w.elapsed += float64(float64(n) * w.interval)
	turn := w.elapsed / w.v.Num(walkerCycle)
	diameter, contrast := float32(w.v.Num(walkerDiameter)), float32(w.v.Num(walkerContrast))
	for m := range markerCount {
		x, y := w.project(w.marker(m, w.phase+turn), w.sin, w.cos)
		l.AddDot(Dot{float32(w.x + x + w.origin[m][0]), float32(w.y + y + w.origin[m][1]), diameter, contrast})
	}
	for i := range w.mask[:w.masks] {
		d := &w.mask[i]
		x, y := w.project(w.marker(d.marker, d.phase+turn), float64(d.side*math.Abs(w.sin)), w.cos)
		meanX, meanY := w.project(w.mean[d.marker], float64(d.side*math.Abs(w.sin)), w.cos)
		l.AddDot(Dot{float32(w.x + x - meanX + d.x), float32(w.y + y - meanY + d.y), diameter, contrast})
	}
}

func (w *walker) Truths(add func(name string, value float64)) {
	azimuth := w.v.Num(walkerAzimuth)
	if w.v.Choice(walkerFacing) == 1 {
		azimuth = -azimuth
	}
	add("signed_azimuth_deg", azimuth)
	add("phase_at_onset", w.phase)
}
