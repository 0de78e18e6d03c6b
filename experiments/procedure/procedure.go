// Package procedure decides the level of every trial from the responses to the
// trials before it. Procedures are deterministic: the same Spec, stream and
// responses give the same levels, bit for bit, so that a procedure needs no
// saved state beyond the recorded responses.
package procedure

// A Procedure chooses the levels of one track of trials.
type Procedure interface {
	// Next gives the levels of the next trial, one per Spec.Parameters; ok is false when the
	// track has ended. Calling it twice without Record gives the same levels.
	// The slice is valid until the next call.
	Next() (levels []float64, ok bool)

	// Record takes the outcome of the trial at the levels that Next gave.
	// outcome is the index of the response category; for correct/incorrect
	// tasks 1 is correct and 0 is not.
	Record(outcome int)

	// Trials is the number of outcomes recorded.
	Trials() int

	// Progress is the share of the track done, 0 to 1, never falling.
	Progress() float64

	// Estimate is the track's own estimate so far.
	Estimate() Estimate
}

// A Postponer is a Procedure that can put off the level that Next gives, because
// its trial did not count. Other procedures give the level again.
type Postponer interface{ Postpone() }

// A Setter is a Procedure whose trials end with a setting, in the level's unit,
// to be given before Record.
type Setter interface{ Set(x float64) }

// Estimate is a procedure's own estimate of the threshold on the level's scale.
// Valid is false while there is none (no reversals yet, say): the numbers are
// then zero, and Reason says why.
type Estimate struct {
	Valid     bool
	Threshold float64 // in the level's own unit
	SDLog10   float64 // posterior or reversal sd: log10 units on a log scale, the level's unit on a linear one
	Slope     float64 // 0 where the procedure does not estimate it
	Lapse     float64
	Gradient  float64 // of log threshold on log10 of the second parameter
	Reversals int
	Reason    string
}

// Method names a family of procedures.
type Method int

// Methods, named in study files as in MethodNames.
const (
	Constant Method = iota // method of constant stimuli
	Staircase
	QuestPlus
	Quest       // Watson and Pelli 1983
	Psi         // Kontsevich and Tyler 1999
	PsiMarginal // Prins 2013
	Limits
	Adjustment
)

// MethodNames are the names in study files, indexed by Method.
var MethodNames = []string{"constant", "staircase", "quest_plus", "quest", "psi", "psi_marginal", "limits", "adjustment"}

// Scale is the axis on which levels are stepped and fitted.
type Scale int

// Scales, named in study files as in ScaleNames.
const (
	Log10 Scale = iota
	Linear
)

// ScaleNames are the names in study files, indexed by Scale.
var ScaleNames = []string{"log10", "linear"}

// Prior is how likely the thresholds considered are before the first trial.
type Prior int

// Priors, named in study files as in PriorNames. RaisedCosine is ten times as
// likely in the middle of the range, on the scale, as at its ends; halfway out it is
// as likely as Uniform. Normal has PriorMean and PriorSDLog10. Middle is even over
// the middle half of the range and a twentieth of that outside.
const (
	RaisedCosine Prior = iota
	Uniform
	Normal
	Middle
)

// PriorNames are the names in study files, indexed by Prior.
var PriorNames = []string{"raised_cosine", "uniform", "normal", "middle"}

// DefaultSlopes are quantiles, at 1/12, 3/12, … 11/12, of a log-normal
// distribution with median 3.5 and standard deviation 0.3 of the natural
// logarithm, so that taking them as equally likely is taking that distribution:
// nine in ten from 2.1 to 5.7. The median is the slope of two-alternative
// contrast detection (Watson AB, Pelli DG 1983, Percept Psychophys 33:113); the
// spread is common practice, no source. Where functions are known to be
// shallower, as in some discrimination of motion, a study gives its own slopes.
func DefaultSlopes() []float64 { return []float64{2.31, 2.86, 3.29, 3.73, 4.28, 5.3} }

// DefaultLapses are quantiles, at 1/8, 3/8, 5/8 and 7/8, of a beta distribution
// with mean 0.02 and standard deviation 0.014, Beta(2, 98). Attentive observers
// lapse in 0 to 6 % of trials (Wichmann FA, Hill NJ 2001, Percept Psychophys
// 63:1293, whose constraint this is).
func DefaultLapses() []float64 { return []float64{0.006, 0.013, 0.021, 0.036} }

// Spec is a procedure as written in a study file. Which fields matter depends on Method.
type Spec struct {
	Method    Method
	Parameter string // key of the display parameter that is varied
	Scale     Scale
	Min, Max  float64 // lowest and highest level, in the parameter's unit
	MinTrials int
	MaxTrials int

	// Constant.
	Levels     []float64
	Repetition int // trials per level

	// Staircase (Levitt 1971; Kaernbach 1991; García-Pérez 1998).
	Start     float64
	Down      int       // correct responses in a row before a step towards harder
	Up        int       // wrong responses in a row before a step towards easier
	StepsUp   []float64 // step size towards easier until each reversal, the last one stays: log10 units or the level's unit
	StepRatio float64   // size of a step towards harder ÷ a step towards easier
	Reversals int       // ends after this many, 0: by MaxTrials alone
	Discard   int       // reversals left out of the estimate
	EasierIs  int       // +1: a higher level is easier, −1: a lower one is

	// QuestPlus (Watson 2017): Weibull on the chosen scale.
	ThresholdMin, ThresholdMax float64
	ThresholdCount             int
	Prior                      Prior     // over ThresholdMin to ThresholdMax
	Slopes                     []float64 // equally likely beforehand; so are the lapse rates
	Lapses                     []float64
	Guess                      float64
	LevelCount                 int     // levels from Min to Max, evenly on the scale
	StopSDLog10                float64 // ends when the posterior sd of the threshold is below, 0: never
	// Nuisance: slope and lapse are integrated out and trials are spent on the
	// threshold alone (Prins 2013).
	Nuisance bool

	// Bayesian methods.
	Place           Place
	PriorMean       float64 // of Normal: the likeliest threshold, in the level's unit
	PriorSDLog10    float64
	KeepSlope       bool    // PsiMarginal: only lapse rates (and gradients) are integrated out
	StopEntropyBits float64 // ends when the entropy of the threshold is below, 0: never

	// A second parameter, of which every level can be shown with every level of
	// the first. Its gradients are equally likely beforehand.
	Second       string
	SecondLevels []float64 // above 0, in the second parameter's unit
	Gradients    []float64 // log10 threshold for each log10 unit of the second parameter
}
