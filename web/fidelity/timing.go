package fidelity

// Hold is a trial, perhaps with a task that holds the page up.
type Hold struct {
	StimulusFrames int     `json:"stimulusFrames"`
	RefreshMs      float64 `json:"refreshMs"`
	HoldMs         float64 `json:"holdMs"`        // 0: none
	HoldAfter      int     `json:"holdAfter"`     // presented frames before it
	AnswerAfterMs  float64 `json:"answerAfterMs"` // from the onset as observed; 0: no answer
}

// Seen is what the observer found in one frame of the page.
type Seen struct {
	AtMs    float64 `json:"at"`    // when the frame was finished, page's clock
	FrameMs float64 `json:"frame"` // the browser's time of the frame
	Place   int     `json:"place"` // refresh intervals told by the disc on the canvas, −1 without stimulus
}

// Marked is what recorder and observer say about one trial. The stimulus is a
// disc whose place tells how many refresh intervals the trial code says have passed.
type Marked struct {
	Measurement struct {
		Response    *string   `json:"response"`
		RTMs        *float64  `json:"rt_ms"`
		OnsetMs     *float64  `json:"onset_ms"`
		OffsetMs    *float64  `json:"offset_ms"`
		FrameSteps  []int     `json:"frame_steps"`
		IntervalsMs []float64 `json:"intervals_ms"`
		Interrupted string    `json:"interrupted"`
	} `json:"measurement"`
	Seen        []Seen  `json:"seen"`
	HeldFromMs  float64 `json:"heldFrom"`
	HeldUntilMs float64 `json:"heldUntil"`
	PressedAtMs float64 `json:"pressedAt"`
}

// RunMarked runs a trial of the participant's own code on a small canvas.
func (b *Bench) RunMarked(h Hold) (Marked, error) {
	var m Marked
	return m, b.call(&m, "runMarked", h)
}

// Shown gives the frames in which the observer saw the stimulus anew: a place
// that stands for two frames is one presentation.
func (m *Marked) Shown() []Seen {
	var shown []Seen
	for _, s := range m.Seen {
		if s.Place >= 0 && (len(shown) == 0 || shown[len(shown)-1].Place != s.Place) {
			shown = append(shown, s)
		}
	}
	return shown
}

// Recorded is the number of refresh intervals in the record and how many of
// them passed without a new frame.
func (m *Marked) Recorded() (intervals, dropped int) {
	for _, s := range m.Measurement.FrameSteps {
		intervals += s
		dropped += s - 1
	}
	return intervals, dropped
}
