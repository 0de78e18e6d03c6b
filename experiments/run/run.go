// Package run is the state machine of one run: what comes next, given what was
// recorded. The browser, the server's rehearsals and replay all use it. Start
// with Step (what comes next), Record (what happened) and Run, which joins them.
package run

import (
	"errors"
	"math"
	"strconv"

	"distal/experiments/display"
	"distal/experiments/procedure"
	"distal/experiments/random"
	"distal/experiments/study"
)

// Assignment is what the server gave a run when it began.
type Assignment struct {
	Seed  uint64
	Group int // index in the study's groups, 0 without any
	Order int // running number of runs, selects the block order
}

// Run is the state of a run. It follows from study, assignment and records alone.
type Run struct {
	study      *study.Study
	assignment Assignment

	sequence   int // of the last record
	screened   bool
	consented  bool
	card       *Card
	distance   *Distance
	check      *DisplayCheck
	instructed bool
	answered   bool
	debriefed  bool
	refused    string
	withdrawn  bool

	order    []int // block indices
	position int   // in order
	block    *block
	number   int // of the next trial
	next     *TrialPlan
	redo     *TrialPlan // an interrupted trial, to be asked again
	progress float64
	decider  procedure.Procedure

	show stage
}

// New begins a run of s.
func New(s *study.Study, a Assignment) (*Run, error) {
	if len(s.Groups) > 0 && (a.Group < 0 || a.Group >= len(s.Groups)) {
		return nil, errors.New("group " + strconv.Itoa(a.Group) + " does not exist in the study")
	}
	if a.Order < 0 {
		return nil, errors.New("the order number must not be negative")
	}
	r := &Run{study: s, assignment: a, order: BlockOrder(s, a)}
	r.show.open(s)
	return r, nil
}

// Sequence is the number of the last record applied.
func (r *Run) Sequence() int { return r.sequence }

// Study is the study of the run.
func (r *Run) Study() *study.Study { return r.study }

// baseValues are a display's values with the group's settings put in.
func (r *Run) baseValues(d int) display.Values {
	v := r.study.Displays[d].Values.Clone()
	if len(r.study.Groups) > 0 {
		for _, set := range r.study.Groups[r.assignment.Group].Set {
			if set.Display == d {
				v[r.study.Displays[d].Kind.Index(set.Key)][0] = set.Value
			}
		}
	}
	return v
}

// Next says what comes next. It changes nothing that a caller can see.
func (r *Run) Next() Step {
	switch {
	case r.withdrawn:
		return Step{Kind: StepWithdrawn}
	case r.refused != "":
		return Step{Kind: StepRefused, Code: r.refused}
	case r.debriefed:
		return Step{Kind: StepDone, Progress: 1}
	case !r.consented:
		return Step{Kind: StepConsent}
	case !r.screened:
		return Step{Kind: StepScreening}
	case r.card == nil:
		return Step{Kind: StepCard, Progress: r.progress}
	case r.distance == nil:
		return Step{Kind: StepDistance, Progress: r.progress}
	case r.check == nil:
		return Step{Kind: StepDisplayCheck, Progress: r.progress}
	case !r.instructed:
		return Step{Kind: StepInstructions}
	}
	if step, more := r.nextInBlocks(); more {
		return step
	}
	if len(r.study.Questions) > 0 && !r.answered {
		return Step{Kind: StepQuestions, Progress: 1}
	}
	return Step{Kind: StepDebrief, Progress: 1}
}

// nextInBlocks is the next trial or break; more is false after the last block.
func (r *Run) nextInBlocks() (Step, bool) {
	for r.position < len(r.order) {
		index := r.order[r.position]
		if r.block == nil {
			r.block = r.openBlock(index)
		}
		spec := &r.study.Blocks[index]
		if r.redo == nil && r.block.ended(r) {
			if spec.Kind == study.Practice && spec.Practice.Otherwise == study.EndRun && !r.block.criterionMet(spec) {
				r.refused = "practice"
				return Step{Kind: StepRefused, Code: r.refused}, true
			}
			r.position++
			r.block, r.next = nil, nil
			continue
		}
		r.advanceProgress()
		if !r.block.introShown && (r.position > 0 || len(spec.Message) > 0) || r.block.breakDue {
			return Step{Kind: StepBreak, Progress: r.progress, Block: spec.Name, Index: index}, true
		}
		return Step{Kind: StepTrial, Progress: r.progress, Block: spec.Name, Index: index, Trial: r.plan()}, true
	}
	return Step{}, false
}

// plan is the next trial; it is decided once.
func (r *Run) plan() *TrialPlan {
	if r.next != nil {
		return r.next
	}
	if r.redo != nil {
		again := *r.redo
		again.Number = r.number
		again.RefreshMs = r.check.RefreshMs
		r.frames(&again, &r.study.Tasks[again.Task])
		r.next = &again
		return r.next
	}
	r.next = r.block.plan(r)
	return r.next
}

// advanceProgress raises the progress to what the measurement blocks say.
func (r *Run) advanceProgress() {
	done, all := 0.0, 0.0
	for i, index := range r.order {
		if r.study.Blocks[index].Kind != study.Measurement {
			continue
		}
		all++
		switch {
		case i < r.position:
			done++
		case i == r.position:
			done += r.block.progress(r)
		}
	}
	if all > 0 {
		r.progress = max(r.progress, done/all)
	}
}

// Apply takes a record that was made in answer to Next. The error says what
// does not fit; the run is then unchanged.
func (r *Run) Apply(rec *Record) error {
	if rec.Sequence != r.sequence+1 {
		return errors.New("record " + strconv.Itoa(rec.Sequence) + " does not follow record " + strconv.Itoa(r.sequence))
	}
	step := r.Next()
	var err error
	switch rec.Kind {
	case KindEvent:
		err = r.applyEvent(step, rec.Event)
	case KindWithdrawal:
		err = r.applyWithdrawal(step)
	case KindRefusal:
		err = r.applyRefusal(step, rec.Refusal)
	default:
		if want, ok := kindFor(step.Kind); !ok || want != rec.Kind {
			return errors.New("a " + KindNames[rec.Kind] + " record does not fit: the next step is " + StepKindNames[step.Kind])
		}
		err = r.applyStep(step, rec)
	}
	if err == nil {
		r.sequence++
	}
	return err
}

// kindFor is the kind of record that answers a step.
func kindFor(k StepKind) (Kind, bool) {
	switch k {
	case StepConsent:
		return KindConsent, true
	case StepScreening:
		return KindScreening, true
	case StepCard:
		return KindCard, true
	case StepDistance:
		return KindDistance, true
	case StepDisplayCheck:
		return KindDisplayCheck, true
	case StepInstructions:
		return KindInstructions, true
	case StepTrial:
		return KindTrial, true
	case StepBreak:
		return KindBreak, true
	case StepQuestions:
		return KindAnswers, true
	case StepDebrief:
		return KindDebrief, true
	}
	return 0, false
}

func (r *Run) applyStep(step Step, rec *Record) error {
	switch rec.Kind {
	case KindConsent:
		r.consented = true
	case KindScreening:
		r.screened = true
		r.refused = screen(r.study, rec.Screening)
	case KindCard:
		if bad := CheckCard(r.study, rec.Card); bad != "" {
			return errors.New("the card calibration cannot be used: " + bad)
		}
		r.card = rec.Card
	case KindDistance:
		if bad := CheckDistance(r.study, rec.Distance); bad != "" {
			return errors.New("the viewing distance cannot be used: " + bad)
		}
		r.distance = rec.Distance
	case KindDisplayCheck:
		if bad := CheckDisplay(r.study, rec.Check); bad != "" {
			return errors.New("the display cannot be used: " + bad)
		}
		r.check = rec.Check
		r.next = nil
	case KindInstructions:
		r.instructed = true
	case KindBreak:
		r.block.introShown, r.block.breakDue, r.block.sinceBreak = true, false, 0
	case KindTrial:
		return r.applyTrial(step.Trial, rec.Trial)
	case KindAnswers:
		if err := CheckAnswers(r.study, rec.Answers); err != nil {
			return err
		}
		r.answered = true
	case KindDebrief:
		r.debriefed = true
	}
	return nil
}

func (r *Run) applyWithdrawal(step Step) error {
	if step.Kind == StepConsent || step.Kind == StepWithdrawn {
		return errors.New("a withdrawal does not fit: the next step is " + StepKindNames[step.Kind])
	}
	r.withdrawn = true
	return nil
}

// applyEvent notes what an event changes: another zoom or screen breaks the
// calibration, as long as something is still to be shown.
func (r *Run) applyEvent(step Step, e *Event) error {
	switch step.Kind {
	case StepConsent, StepWithdrawn:
		return errors.New("an event does not fit: the next step is " + StepKindNames[step.Kind])
	case StepQuestions, StepDebrief, StepDone, StepRefused:
		return nil
	}
	switch e.Name {
	case "zoomed":
		r.card, r.distance, r.check = nil, nil, nil
	case "resized":
		r.check = nil
	}
	return nil
}

func (r *Run) applyRefusal(step Step, refusal *Refusal) error {
	switch step.Kind {
	case StepConsent, StepDone, StepWithdrawn:
		return errors.New("a refusal does not fit: the next step is " + StepKindNames[step.Kind])
	}
	if r.refused == "" {
		r.refused = refusal.Reason
	}
	return nil
}

// applyTrial compares a trial with its plan and passes the outcome on.
func (r *Run) applyTrial(p *TrialPlan, t *TrialRecord) error {
	if bad := r.compare(p, t); bad != "" {
		return errors.New("trial " + strconv.Itoa(t.Trial) + " is not the one that was planned: " + bad)
	}
	r.number++
	r.next, r.show.plan = nil, nil
	r.redo = nil
	if t.Interrupted != "" && t.Interrupted != DroppedFrame {
		r.redo = p
	}
	r.decider = nil
	r.block.record(r, p, t)
	return nil
}

// Decider is the procedure that took the trial applied last, as that trial left
// it; nil if the trial told no procedure anything.
func (r *Run) Decider() procedure.Procedure { return r.decider }

// compare says how a recorded trial differs from its plan, "" if it does not.
func (r *Run) compare(p *TrialPlan, t *TrialRecord) string {
	task := &r.study.Tasks[p.Task]
	switch {
	case t.Trial != p.Number:
		return "number " + strconv.Itoa(p.Number) + " was expected"
	case t.Block != r.study.Blocks[p.Block].Name:
		return "block " + r.study.Blocks[p.Block].Name + " was expected"
	case t.Task != task.Name || t.Display != r.study.Displays[p.Display].Name:
		return "task or display differs"
	case t.Track != p.Track || t.Practice != p.Practice || t.Catch != p.Catch || t.Condition != p.Condition:
		return "track, practice, catch or condition differs"
	case !sameNumber(t.Level, p.Level):
		return "the level differs"
	case !sameValues(p, t):
		return "the values differ"
	case t.RefreshMs != p.RefreshMs || t.StimulusSteps != p.StimulusFrames || t.FixationSteps != p.FixationFrames:
		return "the refresh interval or the planned frames differ"
	case t.Order != orderText(p.Order) || t.Place != r.placeName(p):
		return "the order of the intervals or the place differs"
	case t.Response != "" && choiceIndex(task, t.Response) < 0 && t.Response != study.Said[task.Answer.By]:
		return "there is no choice " + strconv.Quote(t.Response)
	case t.Correct != rightness(task, p, t.Response, t.Interrupted):
		return "right or wrong differs"
	case t.Dropped != dropped(t.Steps):
		return "the dropped frames are not those of the frame steps"
	case (t.Interrupted == "" || t.Interrupted == DroppedFrame) && (t.Interrupted != "") != r.block.repeats(&r.study.Blocks[p.Block], t.Dropped):
		return "whether it is repeated for a dropped frame differs"
	}
	return r.compareGiven(p, t)
}

// choiceIndex is the index of the choice called name, −1 if there is none.
func choiceIndex(task *study.Task, name string) int {
	for i := range task.Choices {
		if task.Choices[i].Name == name {
			return i
		}
	}
	return -1
}

// sameNumber compares bit for bit, all NaN being the same.
func sameNumber(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }

func sameValues(p *TrialPlan, t *TrialRecord) bool {
	if len(p.Keys) != len(t.Keys) {
		return false
	}
	for i := range p.Keys {
		j := indexOf(t.Keys, p.Keys[i])
		if j < 0 || t.Values[j] != p.Values[i] {
			return false
		}
	}
	return true
}

// rightness is 1 or 0, −1 where no answer is right and in interrupted trials.
// No answer is wrong in a catch trial, and tells nothing elsewhere.
func rightness(task *study.Task, p *TrialPlan, response, interrupted string) int {
	if p.CorrectChoice < 0 || interrupted != "" || response == "" && !p.Catch {
		return -1
	}
	if response == task.Choices[p.CorrectChoice].Name {
		return 1
	}
	return 0
}

// BlockOrder is the order of the study's blocks in a run. Practice blocks keep
// their places; measurement blocks change theirs as the study says.
func BlockOrder(s *study.Study, a Assignment) []int {
	order := make([]int, len(s.Blocks))
	var measured []int
	for i := range s.Blocks {
		order[i] = i
		if s.Blocks[i].Kind == study.Measurement {
			measured = append(measured, i)
		}
	}
	n := len(measured)
	permutation := make([]int, n)
	switch s.Orders.Method {
	case study.LatinSquare:
		square := Williams(n)
		if len(square) > 0 {
			permutation = square[a.Order%len(square)]
		}
	case study.Shuffled:
		stream := random.New(a.Seed, 0, random.PurposeOrder)
		stream.Perm(permutation)
	default:
		return order
	}
	for k, at := range measured {
		order[at] = measured[permutation[k]]
	}
	return order
}

// Williams is the balanced Latin square of Williams EJ (1949, Aust J Sci Res A
// 2:149): n rows for even n, 2n for odd n, in which every treatment follows
// every other equally often. The first row is 0 1 n−1 2 n−2 …, each further row
// adds 1 modulo n; for odd n the reversed rows follow.
func Williams(n int) [][]int {
	if n == 0 {
		return nil
	}
	first := make([]int, n)
	for i := 1; i < n; i++ {
		if i%2 == 1 {
			first[i] = (i + 1) / 2
		} else {
			first[i] = n - i/2
		}
	}
	var rows [][]int
	for shift := range n {
		row := make([]int, n)
		for i := range row {
			row[i] = (first[i] + shift) % n
		}
		rows = append(rows, row)
	}
	if n%2 == 1 && n > 1 {
		for i := range n {
			reversed := make([]int, n)
			for j := range reversed {
				reversed[j] = rows[i][n-1-j]
			}
			rows = append(rows, reversed)
		}
	}
	return rows
}
