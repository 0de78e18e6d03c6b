package inspection

import (
	"math"

	"distal/experiments/visual"
)

// Limits of WCAG 2.2, success criterion 2.3.1 (W3C 2023): a general flash is a
// pair of opposing changes of relative luminance of 10 % of white or more where
// the darker state is below 0.80; at most three in a second, unless what
// flashes together covers less than a quarter of any 10 degrees of the visual field.
const (
	flashChange    = 0.10
	flashDarker    = 0.80
	maxTransitions = 6 // three pairs
	flashFieldDeg  = 10.0
	flashShare     = 0.25
	// concurrentMs is within what time changes in one direction are concurrent: two
	// frames at 60 Hz, within which nearly all places of one flickering pattern pass the
	// threshold, the fainter ones later.
	concurrentMs = 1000.0 / 30
	secondMs     = 1000 - 1e-6 // changes exactly a second apart are not within one second
)

// GeneralFlash tells whether a change between two relative luminances, 0 to 1,
// is one half of a general flash.
func GeneralFlash(a, b float64) bool {
	return math.Abs(a-b) >= flashChange && min(a, b) < flashDarker
}

// RedFlash tells whether a change between two colours in linear light, 0 to 1,
// is one half of a red flash: one of them is a saturated red, R/(R+G+B) ≥ 0.8,
// and they are more than 0.2 apart in CIE 1976 u'v' (WCAG 2.2 after ISO
// 9241-391). Black has no chromaticity: a change between it and a saturated red counts.
func RedFlash(a, b [3]float64) bool {
	if !saturatedRed(a) && !saturatedRed(b) {
		return false
	}
	ua, va, okA := chromaticity(a)
	ub, vb, okB := chromaticity(b)
	return okA != okB || math.Hypot(ua-ub, va-vb) > 0.2
}

func saturatedRed(c [3]float64) bool {
	sum := c[0] + c[1] + c[2]
	return sum > 0 && c[0]/sum >= 0.8
}

// chromaticity is CIE 1976 u'v' of linear sRGB (IEC 61966-2-1); not ok for black.
func chromaticity(c [3]float64) (u, v float64, ok bool) {
	x := 0.4124564*c[0] + 0.3575761*c[1] + 0.1804375*c[2]
	y := 0.2126729*c[0] + 0.7151522*c[1] + 0.0721750*c[2]
	z := 0.0193339*c[0] + 0.1191920*c[1] + 0.9503041*c[2]
	sum := x + 15*y + 3*z
	if sum == 0 {
		return 0, 0, false
	}
	return 4 * x / sum, 9 * y / sum, true
}

// Luminance is the relative luminance of an 8-bit sRGB colour (W3C, IEC 61966-2-1).
func Luminance(r, g, b uint8) float64 {
	linear := func(v uint8) float64 { return visual.LinearFromSRGB(float64(v) / 255) }
	return 0.2126*linear(r) + 0.7152*linear(g) + 0.0722*linear(b)
}

// FlashVerdict is what a sequence of frames comes to.
type FlashVerdict struct {
	Passes bool
	// WorstShare is the largest share of any 10° field that had more than three
	// flashes within the second before WorstMs, the last of them concurrently.
	WorstShare  float64
	WorstMs     float64
	WorstXDeg   float64 // centre of that field
	WorstYDeg   float64
	Transitions int // most changes of any one place within a second
}

// FlashCheck looks for general flashes in a sequence of frames. Displays are
// achromatic, so that red flashes cannot arise. Every pixel counts its own
// opposing changes; averages over fine patterns are not taken, so the check is
// strict with balanced textures. Moving dots pass many places many times, but few
// of them at once: they are no flash of a field.
type FlashCheck struct {
	screen   Screen
	low      []float32 // extremes of relative luminance since the last change
	high     []float32
	up       []int8 // last change: +1 up, −1 down, 0 none yet
	times    [][]float64
	verdict  FlashVerdict
	started  bool
	rows     []int32 // running sums of flashing pixels along rows
	halfRow  []int   // half width in px of the 10° field at each row offset
	radiusPx int
	fieldPx  float64
	stride   int
}

// NewFlashCheck starts a check of frames on a screen.
func NewFlashCheck(s Screen) *FlashCheck {
	n := s.WidthPx * s.HeightPx
	c := &FlashCheck{
		screen: s, low: make([]float32, n), high: make([]float32, n), up: make([]int8, n), times: make([][]float64, n),
		rows: make([]int32, (s.WidthPx+1)*s.HeightPx),
	}
	// The field is taken as a disc on the screen, 5° in radius at the centre.
	c.radiusPx = int(math.Round(s.PxPerTan * math.Tan(radians(flashFieldDeg/2))))
	c.stride = max(1, c.radiusPx/20)
	for dy := -c.radiusPx; dy <= c.radiusPx; dy++ {
		half := int(math.Sqrt(float64(c.radiusPx*c.radiusPx - dy*dy)))
		c.halfRow = append(c.halfRow, half)
		c.fieldPx += float64(2*half + 1)
	}
	c.verdict.Passes = true
	return c
}

// Add takes the next frame, shown atMs. Its light is in units of the background.
func (c *FlashCheck) Add(light []float32, atMs float64) {
	background := float32(c.screen.BackgroundFraction)
	worst := false
	for i, l := range light {
		l = max(0, min(1, l*background))
		if !c.started {
			c.low[i], c.high[i] = l, l
			continue
		}
		if c.change(i, l) {
			c.times[i] = append(c.times[i], atMs)
		}
		for len(c.times[i]) > 0 && c.times[i][0] <= atMs-secondMs {
			c.times[i] = c.times[i][1:]
		}
		n := len(c.times[i])
		c.verdict.Transitions = max(c.verdict.Transitions, n)
		worst = worst || n > maxTransitions
	}
	c.started = true
	if worst {
		c.measure(atMs)
	}
}

// change follows the extremes of pixel i and tells whether it now changed by
// the amount of half a flash, against its last change.
func (c *FlashCheck) change(i int, l float32) bool {
	c.low[i], c.high[i] = min(c.low[i], l), max(c.high[i], l)
	switch {
	case c.up[i] <= 0 && l > c.low[i] && GeneralFlash(float64(c.low[i]), float64(l)):
		c.up[i] = 1
	case c.up[i] >= 0 && l < c.high[i] && GeneralFlash(float64(c.high[i]), float64(l)):
		c.up[i] = -1
	default:
		return false
	}
	c.low[i], c.high[i] = l, l
	return true
}

// measure finds the 10° field with the largest share of flashing pixels.
func (c *FlashCheck) measure(atMs float64) {
	w, h := c.screen.WidthPx, c.screen.HeightPx
	for _, direction := range []int8{1, -1} {
		for j := range h {
			sum := int32(0)
			for i := range w {
				if c.flashes(j*w+i, direction, atMs) {
					sum++
				}
				c.rows[j*(w+1)+i+1] = sum
			}
		}
		for j := 0; j < h; j += c.stride {
			for i := 0; i < w; i += c.stride {
				if share := c.share(i, j); share > c.verdict.WorstShare {
					x, y := c.screen.Degrees(i, j)
					c.verdict.WorstShare, c.verdict.WorstMs, c.verdict.WorstXDeg, c.verdict.WorstYDeg = share, atMs, x, y
				}
			}
		}
	}
	c.verdict.Passes = c.verdict.WorstShare < flashShare
}

// flashes tells whether pixel k has had more than three flashes within a second and
// has just changed in a direction: flashes count together where they are concurrent.
func (c *FlashCheck) flashes(k int, direction int8, atMs float64) bool {
	n := len(c.times[k])
	return n > maxTransitions && c.up[k] == direction && c.times[k][n-1] > atMs-concurrentMs
}

func (c *FlashCheck) share(i, j int) float64 {
	w := c.screen.WidthPx
	n := int32(0)
	for k, half := range c.halfRow {
		y := j + k - c.radiusPx
		if y < 0 || y >= c.screen.HeightPx {
			continue
		}
		n += c.rows[y*(w+1)+min(w, i+half+1)] - c.rows[y*(w+1)+max(0, i-half)]
	}
	return float64(n) / c.fieldPx
}

// Verdict is the result so far.
func (c *FlashCheck) Verdict() FlashVerdict { return c.verdict }
