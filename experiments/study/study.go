// Package study holds what a study is: its types, the tables from which it is
// read, checked, described and written, and its canonical form. It reads
// value trees, not files: package studyfile reads YAML and texts.
//
// The same Decode serves the study file (with lines and columns) and, inside
// the browser's engine, the canonical JSON of a bundle.
package study

import (
	"distal/experiments/display"
	"distal/experiments/procedure"
)

// FormatVersion is the version of the study file that this package reads.
const FormatVersion = 1

// Study is a whole study.
type Study struct {
	Format       int // FormatVersion
	About        About
	Participants Participants
	Texts        []TextSet // one per language, the first is the study's own
	Screen       Screen
	Displays     []DisplaySpec
	Tasks        []Task
	Procedures   []ProcedureSpec
	Blocks       []Block
	Groups       []Group
	Orders       Orders
	Questions    []Question
	Exclusions   []ExclusionRule
	Quota        Quota
	Return       Return
}

// About says what the study is and who answers for it.
type About struct {
	Name          string // identifier: lower-case letters, digits and hyphens
	Title         string // what participants read, unless TitleIn has it in their language
	TitleIn       []LocalText
	Investigator  string
	Contact       string // e-mail address or telephone number
	Institution   string
	EthicsID      string   // reference of the responsible board, "" if none was given
	Languages     []string // BCP 47, the first is the default
	Minutes       float64  // expected duration
	Description   string   // for colleagues
	Licence       string   // of the data
	FlashApproval string   // recorded justification where frames exceed WCAG 2.3.1
}

// Participants says who may take part.
type Participants struct {
	MinAgeYears int
	MaxAgeYears int // 0: no limit
	Screening   []ScreeningQuestion
	Payment     string // what participants are told, "" = unpaid
}

// ScreeningQuestion is a yes/no question of the cautions page; the answer
// that does not admit ends the run politely before any display.
type ScreeningQuestion struct {
	Name   string
	Ask    []LocalText
	Admits bool // the answer that lets the participant go on: true = yes
}

// LocalText is a sentence in one language.
type LocalText struct {
	Language string
	Text     string
}

// TextSet holds the Markdown texts of one language, and in the study file the
// names of the files that they come from.
type TextSet struct {
	Language     string
	Version      string // of the consent text, e.g. "2026-11-03"
	Information  string // Markdown
	Consent      string // Markdown: what is agreed to; list items become boxes to tick
	Instructions string
	Debrief      string
}

// Screen says what the participant's screen must manage.
type Screen struct {
	MinRefreshHz       float64
	MaxRefreshHz       float64 // 0: no limit
	MinWidthDeg        float64 // of the visible field at the viewing distance
	MinHeightDeg       float64
	MaxJitterMs        float64 // sd of the frame interval in the display check
	MaxDroppedPercent  float64 // late frames in the display check
	Distance           DistanceMethod
	StatedDistanceMm   float64
	MinDistanceMm      float64
	MaxDistanceMm      float64
	DistanceRepeats    int     // settings of the blind-spot method
	CardRepeats        int     // settings of the card
	MaxCardSpread      float64 // largest accepted (max−min)/mean of the card settings
	MaxDistanceSpread  float64 // largest accepted sd/mean of the distance settings
	BackgroundFraction float64 // mean luminance as a fraction of white, 0.5 by default
	Fullscreen         bool
	FloatTarget        bool // refuse screens whose browser blends in 8 bits only
}

// DistanceMethod is how the viewing distance is found.
type DistanceMethod int

// Distance methods, named in study files as in DistanceNames.
const (
	BlindSpot DistanceMethod = iota
	StatedDistance
)

// DistanceNames are the names in study files, indexed by DistanceMethod.
var DistanceNames = []string{"blind_spot", "stated"}

// DisplaySpec is a display with the study's parameter values.
type DisplaySpec struct {
	Name   string
	Kind   *display.Kind
	Values display.Values
	XDeg   float64 // centre about fixation
	YDeg   float64
}

// Task is what a participant does in a trial.
type Task struct {
	Name             string
	Display          int // index in Displays
	FixationMs       float64
	FixationJitterMs float64 // uniform 0..jitter is added
	StimulusMs       float64
	RampMs           float64 // raised-cosine onset and offset inside StimulusMs
	ResponseWindowMs float64 // from stimulus onset; 0: no limit
	RespondDuring    bool    // responses count while the display is still shown
	IntertrialMs     float64
	FixationMark     FixationMark
	Choices          []Choice // response alternatives
	Feedback         Feedback
	Prompt           []LocalText
	Beside           []int      // displays shown at the same time, with the values of the study
	ShufflePlaces    bool       // they and the task's display change places at random
	Intervals        Intervals  // more than one presentation
	Answer           Answer     // other than by choice
	Confidence       Confidence // asked after the answer
}

// FixationMark is the mark that participants look at.
type FixationMark struct {
	Shown       bool
	DiameterDeg float64
	Contrast    float64
}

// Choice is one response alternative: the keys that give it, its label, and
// what it means: when every value in Correct equals the trial's, it is the
// right answer.
type Choice struct {
	Name    string   // stored with the trial
	Keys    []string // KeyboardEvent.code values, e.g. ArrowLeft
	Label   []LocalText
	Correct []Setting // e.g. direction_deg: 180
	Means   Meaning   // what it says about the intervals
	At      string    // the display at whose place the task's display is, if this is right
}

// Setting is a display parameter with a value.
type Setting struct {
	Key   string
	Value float64 // a choice is the option's index, a boolean 0 or 1
}

// Feedback is what a participant sees after the response.
type Feedback int

// Feedback, named in study files as in FeedbackNames.
const (
	NoFeedback    Feedback = iota
	PracticeOnly           // right or wrong in practice blocks only
	AlwaysRightOr          // right or wrong in every block
)

// FeedbackNames are the names in study files, indexed by Feedback.
var FeedbackNames = []string{"none", "practice", "always"}

// ProcedureSpec is a procedure with a name.
type ProcedureSpec struct {
	Name string
	procedure.Spec
	// Interleave runs so many copies at once, in random alternation.
	Interleave int
}

// Block is a part of a run.
type Block struct {
	Name      string
	Kind      BlockKind
	Task      int // index in Tasks
	Procedure int // index in Procedures, −1 where there is none
	// Balance lists parameters whose values alternate in shuffled, balanced
	// order over the trials (e.g. direction_deg: [0, 180]), fully crossed.
	Balance []Balanced
	// Conditions: one track of the procedure for each, interleaved at random.
	Conditions []Condition
	Trials     int // practice and fixed blocks; 0 where the procedure ends the block
	Fixed      []Setting
	Catch      Catch
	Practice   Criterion
	BreakEvery int // a break after so many trials, 0: only after the block
	// RepeatDropped is how many trials of the block, at most, are repeated because
	// a frame of their stimulus was dropped, 0 for none.
	RepeatDropped int
	Message       []LocalText
}

// BlockKind is practice or measurement.
type BlockKind int

// Block kinds, named in study files as in BlockKindNames.
const (
	Practice BlockKind = iota
	Measurement
)

// BlockKindNames are the names in study files, indexed by BlockKind.
var BlockKindNames = []string{"practice", "measurement"}

// Balanced is a parameter with the values that it takes equally often.
type Balanced struct {
	Key    string
	Values []float64
}

// Condition is a named set of parameter values.
type Condition struct {
	Name string
	Set  []Setting
}

// Catch says how often trials are put in that everybody should get right.
type Catch struct {
	Every int       // one in so many trials on average (2 or more), 0: none
	Set   []Setting // e.g. coherence: 1
}

// Criterion ends a practice block: Correct of the last Window trials; after
// MaxTrials the run goes on or ends as Otherwise says.
type Criterion struct {
	Correct   int
	Window    int
	MaxTrials int
	Otherwise AfterPractice
}

// AfterPractice is what happens when the criterion is not met.
type AfterPractice int

// What happens then, named in study files as in AfterPracticeNames.
const (
	GoOn AfterPractice = iota
	EndRun
)

// AfterPracticeNames are the names in study files, indexed by AfterPractice.
var AfterPracticeNames = []string{"go_on", "end"}

// Group is a between-subject group with the settings that it changes.
type Group struct {
	Name   string
	Weight int
	Set    []GroupSetting
}

// GroupSetting changes a display's parameter for the whole run.
type GroupSetting struct {
	Display int
	Setting
}

// Orders says in which order the measurement blocks come.
type Orders struct {
	Method OrderMethod
}

// OrderMethod is how block orders are balanced.
type OrderMethod int

// Order methods, named in study files as in OrderNames.
const (
	AsWritten   OrderMethod = iota
	LatinSquare             // balanced Latin square, Williams (1949)
	Shuffled
)

// OrderNames are the names in study files, indexed by OrderMethod.
var OrderNames = []string{"as_written", "latin_square", "shuffled"}

// Question is asked at the end.
type Question struct {
	Name     string
	Type     QuestionType
	Ask      []LocalText
	Options  []Option // of a choice
	Min, Max float64  // of a number or scale
	Unit     string
	LowEnd   []LocalText // of a scale
	HighEnd  []LocalText
	Optional bool
}

// Option is an answer that can be chosen.
type Option struct {
	Name  string
	Label []LocalText
}

// QuestionType is the type of a question.
type QuestionType int

// Question types, named in study files as in QuestionTypeNames.
const (
	ChoiceQuestion QuestionType = iota
	NumberQuestion
	TextQuestion
	ScaleQuestion
	YesNoQuestion
)

// QuestionTypeNames are the names in study files, indexed by QuestionType.
var QuestionTypeNames = []string{"choice", "number", "text", "scale", "yes_no"}

// ExclusionRule excludes runs for which the CEL expression When is true.
type ExclusionRule struct {
	Name   string
	When   string // e.g. catch_accuracy < 0.8
	Reason string
}

// Quota is how many valid runs are wanted.
type Quota struct {
	Runs int
}

// Return is where participants go at the end.
type Return struct {
	URL string // https; "{code}" is replaced by the completion code; "" = nowhere
}
