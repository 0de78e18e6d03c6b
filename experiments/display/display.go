// Package display holds the moving displays, one file a stimulus, and what
// they are made of. Start with List (what one frame consists of), Kind (how a
// display declares its parameters) and dots.go (the random-dot kinematogram).
//
// A display is driven in whole refresh intervals: Begin fixes a trial, Step
// advances it by one or more intervals and fills a List. The same trial, seed
// and steps give the same bits on every platform.
package display

// A Display is one stimulus in one place. It is created once per run by its
// Kind's New and used for many trials.
type Display interface {
	// Size gives the most dots, patches and batches that one frame can hold.
	Size() (dots, patches, batches int)

	// Begin prepares a trial: values are those of the trial (the study's, with
	// the condition's and the procedure's levels put in), checked against the
	// Kind before. Begin may allocate the first time only.
	Begin(t Trial)

	// Step advances by n ≥ 0 refresh intervals and appends the frame to l.
	// The first call of a trial has n = 0 and shows the onset frame.
	// A late frame is a step of 2 or more: the display passes through every
	// interval in between, so that what follows is as if it had been shown.
	// Step never allocates.
	Step(n int, l *List)

	// Truths reports what the trial physically is beyond its parameters
	// (pattern direction of a plaid, number of signal dots, ...), stored with the trial.
	Truths(add func(name string, value float64))
}

// A Changer is a Display of which some parameters can change while it is shown,
// without a jump: what was at a place stays there and goes on in the new way.
type Changer interface {
	// Change sets number parameter i from the next step on. It may keep x in the
	// values that Begin got. false: this parameter cannot change; nothing happened.
	Change(i int, x float64) bool
}

// Trial is what a display needs to know about one trial.
type Trial struct {
	Values     Values
	Seed       uint64  // the run's seed
	Number     uint32  // the trial's number in the run, which selects the random stream
	Place      uint32  // which of several simultaneous displays or intervals this is: selects the sub-stream
	IntervalMs float64 // refresh interval measured on this screen
	XDeg, YDeg float64 // centre of the display about fixation
}

// Values holds a display's parameters in the order of Kind.Params; each is a
// list, of length 1 unless the parameter allows more. A choice is the index of
// its option, a boolean is 0 or 1.
type Values [][]float64

// Num is the first number of parameter i.
func (v Values) Num(i int) float64 { return v[i][0] }

// On tells whether the boolean parameter i is set.
func (v Values) On(i int) bool { return v[i][0] != 0 }

// Choice is the option index of parameter i.
func (v Values) Choice(i int) int { return int(v[i][0]) }

// Clone copies v so that a condition's or a level's values can be put in.
func (v Values) Clone() Values {
	c := make(Values, len(v))
	for i := range v {
		c[i] = append([]float64(nil), v[i]...)
	}
	return c
}

// Param declares one parameter of a kind of display: its key in the study file
// (with the unit in it), its range and what it means. It is the single source
// for reading, checking, the JSON Schema, the help and the data dictionary.
type Param struct {
	Key     string   // e.g. "speed_deg_per_s"
	Unit    string   // "deg/s", "" where it has none
	Doc     string   // one sentence: meaning and, where there is one, the published source
	Type    Type     // Number, Integer, Choice or Boolean
	Options []string // of a Choice
	Min     float64  // inclusive
	Max     float64  // inclusive
	Default []float64
	// MaxCount is the largest number of values; 0 and 1 mean a plain value.
	MaxCount int
	Required bool // no default: the study must give it
	Circular bool // a direction: wraps at 360
}

// Type is the type of a parameter.
type Type int

// Types of parameters.
const (
	Number Type = iota
	Integer
	Choice
	Boolean
)

// Kind is one kind of display.
type Kind struct {
	Name   string // as written in the study file, e.g. "dots"
	Doc    string // what it is, one paragraph, with the published source
	Params []Param
	// Check reports contradictions between values that are each in range.
	// It calls problem with the key at fault and a sentence that says what
	// is wrong and what would be right. It may be nil.
	Check func(v Values, problem func(key, message string))
	// Extent is the width and height in degrees that a display with these
	// values can cover about its centre.
	Extent func(v Values) (widthDeg, heightDeg float64)
	New    func(v Values) Display
}

// Index is the position of the parameter called key, or −1.
func (k *Kind) Index(key string) int {
	for i := range k.Params {
		if k.Params[i].Key == key {
			return i
		}
	}
	return -1
}

// Defaults gives the default values, nil where the study must give one.
func (k *Kind) Defaults() Values {
	v := make(Values, len(k.Params))
	for i := range k.Params {
		v[i] = append([]float64(nil), k.Params[i].Default...)
	}
	return v
}
