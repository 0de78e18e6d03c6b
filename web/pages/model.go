// Package pages holds the pages that the server renders: view models here,
// arrangement in the templ files, plots in plot.go.
package pages

// Frame is what stands around a page of the workspace.
type Frame struct {
	Title           string
	Person          string // "" when nobody is signed in
	Admin           bool
	Script          string
	ScriptIntegrity string
	Style           string
	StyleIntegrity  string
}

// StudyRow is a study in a table.
type StudyRow struct {
	ID, Title, Name, State, Quota, Launched                             string
	Valid, Running, Excluded, Refused, Withdrawn, Incomplete, Simulated int
}

// StudiesModel is the page of all studies.
type StudiesModel struct {
	Frame   Frame
	Studies []StudyRow
}

// LibraryEntry is a study that can be launched.
type LibraryEntry struct {
	Name, Title, Description, Minutes string
	Displays                          []string
}

// LibraryModel is the page of the library.
type LibraryModel struct {
	Frame   Frame
	Entries []LibraryEntry
}

// RunRow is a run in a table.
type RunRow struct {
	ID, Started, State, Refresh, Dropped, Catch, MedianRT, Browser string
	Simulated, Excluded                                            bool
	Trials                                                         int
	Thresholds                                                     []string
}

// FunnelStep is how many runs reached a step.
type FunnelStep struct {
	Name  string
	Count int
	Share float64
}

// InvitationRow is an invitation in a table.
type InvitationRow struct{ ID, Label, State, Link string }

// Rule is an exclusion rule.
type Rule struct{ Name, When, Reason string }

// StudyModel is the page of a study.
type StudyModel struct {
	Frame          Frame
	Study          StudyRow
	Link           string
	Bundle         string
	Rules          []Rule
	Funnel         []FunnelStep
	Runs           []RunRow
	RefreshHz      []float64
	Plots          []ThresholdPlot
	ThresholdNames []string
	Invitations    []InvitationRow
}

// Measure is a measure of a run's quality.
type Measure struct{ Name, Value, Unit, Doc string }

// Decision is an exclusion or re-inclusion.
type Decision struct {
	At, By   string
	Excluded bool
	Reason   string
}

// Point is the proportion correct at a level.
type Point struct {
	X    float64
	K, N int
}

// RunPlot is a run's track of levels and its psychometric function.
type RunPlot struct {
	Name, Parameter, Unit, Text, Note string
	Caption, Fitted, YLabel, Marks    string // what was fitted, and what filled points are
	Linear                            bool   // scale of the levels
	Known                             bool   // Threshold, Low and High mean something
	Levels                            []float64
	Correct                           []bool
	Points                            []Point
	Predict                           func(x float64) float64
	Threshold, Low, High              float64
	Estimates                         []Standing // the procedure's own after each trial
	Standing                          string     // what it says of itself at the end
}

// Standing is a procedure's estimate after a trial; Low and High are one standard
// deviation away. It is not drawn while Known is false.
type Standing struct {
	Known                bool
	Threshold, Low, High float64
}

// PhaseRow compares planned with shown stimuli of one task.
type PhaseRow struct {
	Task, Planned, Median, Longest  string
	Trials, Exact, Late, EndedEarly int
}

// RunModel is the page of a run.
type RunModel struct {
	Frame               Frame
	Run                 RunRow
	StudyID, StudyTitle string
	Seed, Bundle        string
	Measures            []Measure
	Plots               []RunPlot
	Calibration         []string
	Events              []string
	IntervalsMs         []float64
	Phases              []PhaseRow
	Decisions           []Decision
}

// PersonRow is somebody of the lab.
type PersonRow struct {
	ID, Name, Email, Role string
	Active, Self          bool
}

// PeopleModel is the page of the lab's people.
type PeopleModel struct {
	Frame         Frame
	People        []PersonRow
	LinkFor, Link string
}

// LedgerRow is a line of the ledger.
type LedgerRow struct {
	Number                     int64
	At, Person, Action, Detail string
}

// LedgerModel is the page of the ledger. Broken is the number of the first
// entry that does not fit the chain of digests, 0 if all do.
type LedgerModel struct {
	Frame   Frame
	Broken  int64
	Entries []LedgerRow
}
