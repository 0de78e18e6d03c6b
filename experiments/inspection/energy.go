package inspection

import "math"

// SpaceTime is a picture of luminance over space, along one direction, and
// time: row n is frame n. Light is in units of the background.
type SpaceTime struct {
	Light      [][]float64
	StepDeg    float64 // between columns
	IntervalMs float64 // between rows
}

// Cut samples a raster along a line through (xDeg, yDeg) in a direction,
// counter-clockwise from rightwards, at n places stepDeg apart, by bilinear
// interpolation; outside the screen it is the background.
func (r *Raster) Cut(xDeg, yDeg, directionDeg, stepDeg float64, n int) []float64 {
	sin, cos := math.Sincos(radians(directionDeg))
	out := make([]float64, n)
	for k := range out {
		along := (float64(k) - float64(n-1)/2) * stepDeg
		px := r.PxPerTan*math.Tan(radians(xDeg+along*cos)) + float64(r.WidthPx)/2 - 0.5
		py := float64(r.HeightPx)/2 - 0.5 - r.PxPerTan*math.Tan(radians(yDeg+along*sin))
		out[k] = r.sample(px, py)
	}
	return out
}

func (r *Raster) sample(px, py float64) float64 {
	i, j := int(math.Floor(px)), int(math.Floor(py))
	u, v := px-float64(i), py-float64(j)
	at := func(i, j int) float64 {
		if i < 0 || j < 0 || i >= r.WidthPx || j >= r.HeightPx {
			return 1
		}
		return float64(r.Light[j*r.WidthPx+i])
	}
	return (1-v)*((1-u)*at(i, j)+u*at(i+1, j)) + v*((1-u)*at(i, j+1)+u*at(i+1, j+1))
}

// Energy is directional motion energy along the cut.
type Energy struct {
	Forward, Backward float64 // mean squared responses in the cut's direction and against it
}

// Net is (forward − backward)/(forward + backward), −1 to 1; 0 without any energy.
func (e Energy) Net() float64 {
	if sum := e.Forward + e.Backward; sum > 0 {
		return (e.Forward - e.Backward) / sum
	}
	return 0
}

// Add sums energies of several cuts.
func (e Energy) Add(f Energy) Energy { return Energy{e.Forward + f.Forward, e.Backward + f.Backward} }

// TemporalFilter is the impulse response of order n (3 is the fast, 5 the slow one) at t seconds, k in 1/s:
//
//	f(t) = (kt)^n exp(−kt) (1/n! − (kt)²/(n+2)!)
//
// (Adelson and Bergen 1985, Spatiotemporal energy models for the perception of
// motion, J Opt Soc Am A 2:284, equation 1).
func TemporalFilter(n int, k, t float64) float64 {
	if t <= 0 {
		return 0
	}
	factorial := 1.0
	for i := 2; i <= n; i++ {
		factorial *= float64(i)
	}
	x := k * t
	return math.Pow(x, float64(n)) * math.Exp(-x) * (1/factorial - x*x/(factorial*float64(n+1)*float64(n+2)))
}

const (
	filterRate = 100.0 // k in 1/s, the value usual with these filters (common practice)
	filterMs   = 300.0 // length after which both have died away
	maxStepMs  = 4.2   // longest step in time; frames are held in between
)

// MotionEnergy measures a space-time picture with the model of Adelson and
// Bergen (1985): quadrature pairs of Gabor receptive fields of a spatial
// frequency, with a standard deviation of half a period, and the two temporal filters;
// squared, summed, and averaged over space and time. Light is taken as
// contrast about the background.
func MotionEnergy(p SpaceTime, frequencyCPD float64) Energy {
	if len(p.Light) == 0 {
		return Energy{}
	}
	even, odd := spatialPair(frequencyCPD, p.StepDeg)
	var rowsEven, rowsOdd [][]float64
	hold := int(math.Ceil(p.IntervalMs / maxStepMs)) // a frame stands still for so many steps
	for _, row := range p.Light {
		a, b := convolveRow(row, even), convolveRow(row, odd)
		for range hold {
			rowsEven, rowsOdd = append(rowsEven, a), append(rowsOdd, b)
		}
	}
	stepMs := p.IntervalMs / float64(hold)
	fast, slow := temporalWeights(3, stepMs), temporalWeights(5, stepMs)
	var e Energy
	count := 0
	for n := range rowsEven {
		for x := range rowsEven[n] {
			a, aSlow := filterTime(rowsEven, n, x, fast), filterTime(rowsEven, n, x, slow)
			b, bSlow := filterTime(rowsOdd, n, x, fast), filterTime(rowsOdd, n, x, slow)
			e.Forward += square(aSlow+b) + square(a-bSlow)
			e.Backward += square(aSlow-b) + square(a+bSlow)
			count++
		}
	}
	e.Forward /= float64(count)
	e.Backward /= float64(count)
	return e
}

func square(x float64) float64 { return x * x }

func spatialPair(frequency, step float64) (even, odd []float64) {
	sd := 0.5 / frequency
	half := int(math.Ceil(3 * sd / step))
	for i := -half; i <= half; i++ {
		x := float64(i) * step
		window := math.Exp(-x*x/(2*sd*sd)) * step
		sin, cos := math.Sincos(2 * math.Pi * frequency * x)
		even, odd = append(even, window*cos), append(odd, window*sin)
	}
	// The even filter must not answer to mean luminance.
	sum, weight := 0.0, 0.0
	for i := range even {
		x := float64(i-half) * step
		sum += even[i]
		weight += math.Exp(-x * x / (2 * sd * sd))
	}
	for i := range even {
		x := float64(i-half) * step
		even[i] -= sum / weight * math.Exp(-x*x/(2*sd*sd))
	}
	return even, odd
}

// convolveRow correlates contrast with a filter; beyond the ends is background.
func convolveRow(row, filter []float64) []float64 {
	half := len(filter) / 2
	out := make([]float64, len(row))
	for x := range row {
		for i, w := range filter {
			if at := x + i - half; at >= 0 && at < len(row) {
				out[x] += w * (row[at] - 1)
			}
		}
	}
	return out
}

func temporalWeights(order int, intervalMs float64) []float64 {
	var w []float64
	for t := 0.0; t < filterMs; t += intervalMs {
		// The mean over the interval that a frame is shown, by Simpson's rule.
		a, b, c := TemporalFilter(order, filterRate, t/1000), TemporalFilter(order, filterRate, (t+intervalMs/2)/1000), TemporalFilter(order, filterRate, (t+intervalMs)/1000)
		w = append(w, (a+4*b+c)/6*intervalMs/1000*filterRate)
	}
	return w
}

func filterTime(rows [][]float64, n, x int, weights []float64) float64 {
	sum := 0.0
	for i, w := range weights {
		if n-i < 0 {
			break
		}
		sum += w * rows[n-i][x]
	}
	return sum
}

// Correlator is the mean output of a Hassenstein-Reichardt detector of two
// signals sampled every stepMs: each is delayed by a first-order low-pass of
// time constant tauMs, multiplied with the other undelayed, and the products are
// subtracted; positive for motion from a to b. The first skip samples are left
// out of the mean, so that the filters settle (Reichardt 1961; with
// receptive fields before it, the elaborated detector of van Santen and Sperling 1985, J Opt Soc Am A 2:300).
func Correlator(a, b []float64, stepMs, tauMs float64, skip int) float64 {
	// The exact response of the low-pass to a signal that is straight between samples.
	decay := math.Exp(-stepMs / tauMs)
	share := (1 - decay) * tauMs / stepMs
	sum := 0.0
	slowA, slowB := a[0], b[0]
	for i := 1; i < len(a); i++ {
		slowA = decay*slowA + (share-decay)*a[i-1] + (1-share)*a[i]
		slowB = decay*slowB + (share-decay)*b[i-1] + (1-share)*b[i]
		if i >= skip {
			sum += slowA*b[i] - slowB*a[i]
		}
	}
	return sum / float64(len(a)-max(1, skip))
}

// ElaboratedDetector is the mean output over a space-time picture of
// correlators with Gabor receptive fields a quarter of a period apart (van
// Santen and Sperling 1985), relative to the same without subtraction: −1 to 1 about.
func ElaboratedDetector(p SpaceTime, frequencyCPD, tauMs float64) float64 {
	if len(p.Light) < 2 {
		return 0
	}
	even, _ := spatialPair(frequencyCPD, p.StepDeg)
	apart := max(1, int(math.Round(0.25/frequencyCPD/p.StepDeg)))
	var rows [][]float64
	for _, row := range p.Light {
		rows = append(rows, convolveRow(row, even))
	}
	net, power := 0.0, 0.0
	a, b := make([]float64, len(rows)), make([]float64, len(rows))
	for x := 0; x+apart < len(rows[0]); x++ {
		for n := range rows {
			a[n], b[n] = rows[n][x], rows[n][x+apart]
			power += a[n]*a[n] + b[n]*b[n]
		}
		net += Correlator(a, b, p.IntervalMs, tauMs, 0) * float64(len(rows)-1)
	}
	if power == 0 {
		return 0
	}
	return 2 * net / power
}
