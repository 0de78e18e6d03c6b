package run

import "distal/experiments/display"

// Step is what comes next in a run.
type Step struct {
	Kind     StepKind
	Progress float64 // share of the measurement done, 0 to 1

	Trial *TrialPlan // of StepTrial
	Block string     // of StepTrial, StepBreak and StepBlock: the block's name
	Index int        // of StepBreak: blocks done; of StepBlock: index of the block in the study
	Code  string     // of StepRefused: the reason code
}

// StepKind is the kind of a step.
type StepKind int

// Kinds of step, named on the wire as in StepKindNames, in the order of a run.
const (
	StepConsent StepKind = iota
	StepScreening
	StepCard
	StepDistance
	StepDisplayCheck
	StepInstructions
	StepTrial
	StepBreak // rest; also shown before a new block, with its message
	StepQuestions
	StepDebrief
	StepDone
	StepRefused
	StepWithdrawn
)

// StepKindNames are the names on the wire, indexed by StepKind.
var StepKindNames = []string{
	"consent", "screening", "card", "distance", "display_check", "instructions",
	"trial", "break", "questions", "debrief", "done", "refused", "withdrawn",
}

// TrialPlan is a trial as the engine wants it shown. Frames are refresh intervals.
type TrialPlan struct {
	Block          int // index in the study
	Number         int // in the run, from 0
	Track          int
	Practice       bool
	Catch          bool
	Task           int
	Display        int
	Condition      string
	Keys           []string
	Values         []float64
	Level          float64 // NaN outside a procedure
	CorrectChoice  int     // index in the task's choices, −1 where none is right
	FixationFrames int
	StimulusFrames int
	RampFrames     int
	RefreshMs      float64
	Feedback       bool // show right or wrong after this trial
	// Order tells for each of two intervals whether it is the test, otherwise the
	// reference; nil where there is one presentation.
	Order []bool
	Start float64 // dial: direction of the needle at first; adjustment: first setting; otherwise NaN

	// Places are, for the task's display and those beside it, the displays at whose
	// places they stand; nil where each has its own.
	Places []int

	values         display.Values   // all parameters of the display
	reference      display.Values   // those of the reference
	beside         []display.Values // those of the task's displays beside
	intervalFrames int              // refresh intervals of one presentation
	gapFrames      int
}
