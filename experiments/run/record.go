package run

// Record is one thing that happened in a run, as it is stored and exported.
// Sequence numbers start at 1 and have no gaps. AtMs is the participant's
// clock (ms since 1970). Exactly one of the pointers is set, by Kind; kinds
// without content (KindInstructions, KindBreak) have none.
//
// On the wire a record is one flat JSON object: "sequence", "kind", "at_ms",
// "bundle" and the keys of its content, named as in the comments.
type Record struct {
	Sequence int
	Kind     Kind
	AtMs     float64
	Bundle   string // digest of the bundle that it was made under

	Consent   *Consent
	Screening *Screening
	Card      *Card
	Distance  *Distance
	Check     *DisplayCheck
	Trial     *TrialRecord
	Event     *Event
	Answers   *Answers
	Refusal   *Refusal
}

// Kind is what a record is about.
type Kind int

// Kinds, named on the wire as in KindNames. The order is the order of a run.
const (
	KindConsent Kind = iota
	KindScreening
	KindCard
	KindDistance
	KindDisplayCheck
	KindInstructions
	KindTrial
	KindBreak
	KindAnswers
	KindDebrief
	KindEvent      // any time after consent
	KindRefusal    // the run ends: the person or the screen is not suitable
	KindWithdrawal // the run ends and what was given is deleted
)

// KindNames are the names on the wire, indexed by Kind.
var KindNames = []string{
	"consent", "screening", "card", "distance", "display_check", "instructions",
	"trial", "break", "answers", "debrief", "event", "refusal", "withdrawal",
}

// Consent: what exactly was agreed to.
type Consent struct {
	TextDigest string // "text_digest": SHA-256 (hex) of information + "\n" + consent text (UTF-8 Markdown)
	Version    string // "text_version"
	Language   string // "language"
	Items      int    // "items": number of statements ticked
}

// Screening: the answers of the cautions page.
type Screening struct {
	CautionsRead bool     // "cautions_read"
	AgeYears     int      // "age_years"
	Names        []string // "answers": {name: bool}
	Yes          []bool
}

// Card: the card calibration (ISO/IEC 7810 ID-1).
type Card struct {
	WidthsCSSPx    []float64 // "widths_css_px": the accepted settings
	PixelRatio     float64   // "device_pixel_ratio"
	ScreenWidthPx  int       // "screen_width_css_px"
	ScreenHeightPx int       // "screen_height_css_px"
	PxPerMm        float64   // "css_px_per_mm": mean setting / 85.60 mm
	SDPxPerMm      float64   // "sd_css_px_per_mm"
	Attempts       int       // "attempts": settings made, refused ones included
}

// Distance: the viewing distance.
type Distance struct {
	Method     string    // "method": blind_spot or stated
	OffsetsMm  []float64 // "offsets_mm": fixation mark to where the marker vanished
	Eye        string    // "eye": left or right, the open one; "" when stated
	DistanceMm float64   // "distance_mm"
	SDMm       float64   // "sd_mm": from the settings and from eye to eye
}

// DisplayCheck: what the screen can do.
type DisplayCheck struct {
	RefreshMs       float64 // "refresh_ms": robust refresh interval
	JitterMs        float64 // "jitter_ms": sd of the intervals that are not late
	DroppedPercent  float64 // "dropped_percent"
	Frames          int     // "frames": number of intervals measured
	WidthDeg        float64 // "width_deg": visible field at the distance
	HeightDeg       float64 // "height_deg"
	CanvasWidthPx   int     // "canvas_width_px": device pixels
	CanvasHeightPx  int     // "canvas_height_px"
	PixelRatio      float64 // "device_pixel_ratio"
	FloatTarget     bool    // "float_target": blending in a float target
	Renderer        string  // "renderer": as the browser names it, then the bits of its render target and whether presentation is of low latency
	CrossOriginIsol bool    // "cross_origin_isolated"
}

// TrialRecord: one trial. What the engine decided can be re-created from
// bundle, seed and the records before; it is stored all the same and compared by replay.
type TrialRecord struct {
	Block     string   // "block": name
	Trial     int      // "trial": number in the run, from 0; selects the random streams
	Track     int      // "track": which track of the procedure, −1 in none
	Practice  bool     // "practice"
	Catch     bool     // "catch"
	Task      string   // "task"
	Display   string   // "display"
	Condition string   // "condition": name, "" where there are none
	Keys      []string // "values": {key: number}: every display parameter that this trial set (balanced, condition, catch, level)
	Values    []float64
	Level     float64   // "level": of the procedure's parameter; null (NaN) outside one
	Truths    []float64 // "truths": {name: number} as the display reports them
	TruthKeys []string

	Response   string  // "response": name of the choice, "" (null) if none came in time
	Correct    int     // "correct": 1, 0, −1 (null) where no answer is right
	ResponseMs float64 // "rt_ms": from stimulus onset, NaN (null) without response
	Input      string  // "input": keyboard, pointer, touch or ""
	OnsetMs    float64 // "onset_ms": performance clock of the frame that first showed the stimulus
	OffsetMs   float64 // "offset_ms"

	RefreshMs     float64   // "refresh_ms": interval the trial was computed with
	FixationSteps int       // "fixation_frames": refresh intervals of the fixation phase as planned
	StimulusSteps int       // "stimulus_frames": as planned
	Steps         []int     // "frame_steps": run-length coded "1x29 2 1": refresh intervals from each presented stimulus frame to the next, the last to the offset
	IntervalsMs   []float64 // "intervals_ms": times between these frames, 0.01 ms
	Dropped       int       // "dropped_frames": refreshes missed in the stimulus phase
	JitterMs      float64   // "jitter_ms"
	InputDelayMs  float64   // "input_delay_ms": from the answer's event to its handling by the page, at least 0.01; 0 (left out) if not told
	Digest        string    // "digest": 16 hex digits over the display lists of all presented stimulus frames
	Interrupted   string    // "interrupted": "" or what spoiled the trial (hidden, resized, context_lost, escape, DroppedFrame …); such a trial counts for nothing and is asked again

	Order string // "interval_order": "test reference" and the like where there are two intervals, otherwise "" and not written
	Place string // "place": display at whose place this one was shown where places are shuffled, otherwise "" and not written
	Given *Given // "given": of answers that are more than a choice, otherwise nil and not written
}

// Given is what an answer consists of besides a choice. Numbers that do not
// belong to the task's way of answering are NaN (null), lists empty.
type Given struct {
	ResponseDeg float64 // "response_deg": dial: direction, counter-clockwise from rightwards, 0 to 360
	ErrorDeg    float64 // "error_deg": from the direction that is right, counter-clockwise, above −180 to 180
	Start       float64 // "start": direction or setting that the participant began with, drawn at random
	Setting     float64 // "setting": adjustment: what was confirmed, in the parameter's unit
	HeldMs      float64 // "held_ms": hold: in all
	FirstHeldMs float64 // "first_held_ms": until it was first let go
	Confidence  float64 // "confidence": 1 to the task's steps
	SureMs      float64 // "confidence_rt_ms": from the appearance of the scale

	// Every change of the setting: the number of the presented stimulus frame that
	// first showed it, what was set, and when (ms from stimulus onset).
	AdjustFrames []float64 // "adjust_frames"
	AdjustValues []float64 // "adjust_values"
	AdjustMs     []float64 // "adjust_ms"
	HeldFromMs   []float64 // "held_from_ms": from stimulus onset
	HeldToMs     []float64 // "held_to_ms"
}

// DroppedFrame stands in TrialRecord.Interrupted where a frame of the stimulus
// was dropped and the block has such trials repeated.
const DroppedFrame = "dropped_frame"

// Event: something that happened beside the trials.
type Event struct {
	Name   string // "name": focus_lost, focus_gained, hidden, visible, fullscreen_left, fullscreen_entered, resized, zoomed, context_lost, context_restored, reloaded, resumed, escape, clock_set
	Detail string // "detail": short free text, e.g. the new device pixel ratio
}

// Answers: the questions at the end.
type Answers struct {
	Names  []string // "answers": {name: string|number|bool|null}
	Values []Answer
}

// Answer is text or a number (a yes is 1); Null if left out.
type Answer struct {
	Text   string
	Number float64
	IsText bool
	IsBool bool
	Null   bool
}

// Refusal: why the run ended before its time.
type Refusal struct {
	Step   string // "step": the step that refused
	Reason string // "reason": code, e.g. age, screening, refresh_low, field_small, practice
	Detail string // "detail": the measured value and what was needed
}
