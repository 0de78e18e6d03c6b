package reaction

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Anticipation is the response time in seconds below which no response can be to the
// stimulus (Luce RD 1986, Response times; Whelan R 2008, Psychol Rec 58:475–482, from
// memory).
const Anticipation = 0.100

// FastOptions of the search for fast guesses. The zero value is the default of every field.
type FastOptions struct {
	// Cut in seconds below which responses are fast; 0 means 0.2, common practice for choices
	// (from memory, as at Anticipation).
	Cut float64
	// Guess is the proportion correct of guesses; 0 means ½.
	Guess float64
}

// Fast is what the fast responses are like.
type Fast struct {
	Count         int     `json:"count"`
	Anticipations int     `json:"anticipations"` // below 0.1 s
	Fast          int     `json:"fast"`          // below the cut, anticipations included
	Share         float64 `json:"share"`
	Correct       int     `json:"fast_correct"`
	// AboveChance is the probability of at least as many correct fast responses if all were
	// guesses (exact binomial); small: they are responses to the stimulus and the cut is too high.
	AboveChance float64 `json:"above_chance_p"`
	// OnsetS is where accuracy leaves chance, in seconds: the cut-off from an exponentially
	// weighted moving average of accuracy over responses in order of time (Vandekerckhove J,
	// Tuerlinckx F 2007, Psychon Bull Rev 14:1011–1026), weight 0.01 and limit 1.5 standard
	// deviations. OnsetValid is false where it never does, or does with the first responses.
	OnsetS      float64 `json:"accuracy_onset_s"`
	OnsetValid  bool    `json:"accuracy_onset_valid"`
	Explanation string  `json:"explanation"`
}

// FindFastGuesses looks for responses that are too fast to be to the stimulus.
func FindFastGuesses(trials []Trial, o FastOptions) (*Fast, error) {
	if o.Cut == 0 {
		o.Cut = 0.2
	}
	if o.Guess == 0 {
		o.Guess = 0.5
	}
	if !(o.Cut > 0) || !(o.Guess > 0 && o.Guess < 1) {
		return nil, fmt.Errorf("cut %g s must be above 0 and guess rate %g between 0 and 1", o.Cut, o.Guess)
	}
	f := &Fast{Count: len(trials), AboveChance: 1}
	for _, t := range trials {
		if math.IsNaN(t.RT) {
			return nil, ErrBadTime
		}
		if t.RT < Anticipation {
			f.Anticipations++
		}
		if t.RT < o.Cut {
			f.Fast++
			if t.Correct {
				f.Correct++
			}
		}
	}
	if f.Count == 0 {
		f.Explanation = "There are no responses."
		return f, nil
	}
	f.Share = float64(f.Fast) / float64(f.Count)
	if f.Fast > 0 && f.Correct > 0 {
		f.AboveChance = 1 - distuv.Binomial{N: float64(f.Fast), P: o.Guess}.CDF(float64(f.Correct)-1)
	}
	f.OnsetS, f.OnsetValid = onset(trials, o.Guess)
	f.explain(o)
	return f, nil
}

func (f *Fast) explain(o FastOptions) {
	switch {
	case f.Fast == 0:
		f.Explanation = fmt.Sprintf("No response took less than %g s.", o.Cut)
	case f.AboveChance < 0.05:
		f.Explanation = fmt.Sprintf("%.3g%% of the responses took less than %g s, but with %d of %d correct they are no mere guesses: the cut is too high.", 100*f.Share, o.Cut, f.Correct, f.Fast)
	default:
		f.Explanation = fmt.Sprintf("%.3g%% of the responses took less than %g s; with %d of %d correct they can be guesses.", 100*f.Share, o.Cut, f.Correct, f.Fast)
	}
}

// onset is the time from which the moving average of accuracy stays above its control limit.
func onset(trials []Trial, guess float64) (float64, bool) {
	const weight, limit = 0.01, 1.5
	sorted := slices.Clone(trials)
	slices.SortStableFunc(sorted, func(a, b Trial) int {
		switch {
		case a.RT < b.RT:
			return -1
		case a.RT > b.RT:
			return 1
		}
		return 0
	})
	average := guess
	last := -1 // last response at which accuracy was not above the limit
	for i, t := range sorted {
		x := 0.0
		if t.Correct {
			x = 1
		}
		average += weight * (x - average)
		sigma := math.Sqrt(guess * (1 - guess) * weight / (2 - weight) * (1 - math.Pow(1-weight, 2*float64(i+1))))
		if average <= guess+limit*sigma {
			last = i
		}
	}
	if last < 1 || last == len(sorted)-1 {
		return 0, false
	}
	return sorted[last+1].RT, true
}

// LapseOptions of the search for lapses of attention. The zero value is the default.
type LapseOptions struct {
	// SlowAbove is the number of robust standard deviations of ln time above the median from
	// which a response is slow; 0 means 3 (Leys et al. 2013, J Exp Soc Psychol 49:764–766, on
	// deviations from the median; the logarithm because times are skewed).
	SlowAbove float64
}

// Lapses are signs that an observer was not attending.
type Lapses struct {
	Count    int     `json:"count"`
	Slow     int     `json:"slow"`
	SlowCutS float64 `json:"slow_cut_s"`
	// SlowTrials are the indices of slow responses.
	SlowTrials []int `json:"slow_trials,omitempty"`
	// Easy and EasyWrong count trials at a level where nobody errs who attends; Rate is the
	// share of lapses that they show with its Clopper–Pearson limits RateLow and RateHigh:
	// wrong responses ÷ (1 − guess rate), not above 1.
	Easy      int     `json:"easy"`
	EasyWrong int     `json:"easy_wrong"`
	Rate      float64 `json:"lapse_rate"`
	RateLow   float64 `json:"lapse_rate_low"`
	RateHigh  float64 `json:"lapse_rate_high"`
	// LongestRun is the longest run of the same response, RunP the probability of one at
	// least as long if successive responses were independent.
	LongestRun int     `json:"longest_run"`
	RunP       float64 `json:"longest_run_p"`
}

// Response is one response with what is needed to see lapses.
type Response struct {
	Trial
	Choice int  // which response was given
	Easy   bool // the stimulus was one that nobody mistakes who attends
}

// FindLapses looks for slow responses, errors on easy trials and runs of one response.
// guess is the proportion correct of guesses.
func FindLapses(responses []Response, guess float64, o LapseOptions) (*Lapses, error) {
	if o.SlowAbove == 0 {
		o.SlowAbove = 3
	}
	if !(guess >= 0 && guess < 1) || !(o.SlowAbove > 0) {
		return nil, fmt.Errorf("guess rate %g must be in 0 to 1, and %g deviations above 0", guess, o.SlowAbove)
	}
	l := &Lapses{Count: len(responses), RateHigh: 1, RunP: 1}
	if l.Count == 0 {
		return l, nil
	}
	logs := make([]float64, len(responses))
	for i, r := range responses {
		if !(r.RT > 0) || math.IsInf(r.RT, 0) {
			return nil, ErrBadTime
		}
		logs[i] = math.Log(r.RT)
		if r.Easy {
			l.Easy++
			if !r.Correct {
				l.EasyWrong++
			}
		}
	}
	l.findSlow(logs, o.SlowAbove)
	l.setRate(guess)
	l.setRuns(responses)
	return l, nil
}

func (l *Lapses) findSlow(logs []float64, above float64) {
	sorted := slices.Clone(logs)
	slices.Sort(sorted)
	median := sortedQuantile(sorted, 0.5)
	cut := median + above*mad(sorted, median)
	l.SlowCutS = math.Exp(cut)
	for i, x := range logs {
		if x > cut {
			l.Slow++
			l.SlowTrials = append(l.SlowTrials, i)
		}
	}
}

func (l *Lapses) setRate(guess float64) {
	if l.Easy == 0 {
		return
	}
	n, k := float64(l.Easy), float64(l.EasyWrong)
	scale := func(p float64) float64 { return math.Min(p/(1-guess), 1) }
	l.Rate = scale(k / n)
	if k > 0 {
		l.RateLow = scale(distuv.Beta{Alpha: k, Beta: n - k + 1}.Quantile(0.025))
	}
	if k < n {
		l.RateHigh = scale(distuv.Beta{Alpha: k + 1, Beta: n - k}.Quantile(0.975))
	}
}

// setRuns computes the probability of a run of at least the longest length, by the
// recursion over trials of the distribution of the current run's length, with each
// choice as frequent as it was.
func (l *Lapses) setRuns(responses []Response) {
	counts := map[int]float64{}
	run := 0
	for i, r := range responses {
		counts[r.Choice]++
		if i > 0 && r.Choice == responses[i-1].Choice {
			run++
		} else {
			run = 1
		}
		l.LongestRun = max(l.LongestRun, run)
	}
	if len(counts) < 2 {
		return
	}
	var shares []float64
	for _, c := range counts {
		shares = append(shares, c/float64(len(responses)))
	}
	slices.Sort(shares)
	l.RunP = runProbability(shares, len(responses), l.LongestRun)
}

// runProbability is the probability of a run of length r or more of any one choice in n
// independent draws.
func runProbability(shares []float64, n, r int) float64 {
	if r <= 1 {
		return 1
	}
	// state[c][k]: no run of r so far, the current run is of choice c and length k+1.
	state := make([][]float64, len(shares))
	for c := range state {
		state[c] = make([]float64, r-1)
		state[c][0] = shares[c]
	}
	for range n - 1 {
		total := 0.0
		of := make([]float64, len(shares))
		for c := range state {
			for _, p := range state[c] {
				of[c] += p
			}
			total += of[c]
		}
		for c, share := range shares {
			for k := r - 2; k > 0; k-- {
				state[c][k] = state[c][k-1] * share
			}
			state[c][0] = (total - of[c]) * share
		}
	}
	none := 0.0
	for c := range state {
		for _, p := range state[c] {
			none += p
		}
	}
	return math.Max(1-none, 0)
}
