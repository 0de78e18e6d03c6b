// Package export writes a study's data set and reads it back: runs and trials
// as CSV, every record as it was made, a data dictionary, the signed bundle with
// public keys, and the exclusions. Start with Write and Open.
package export

import (
	"archive/zip"
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"time"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
	"distal/server/bundle"
	"distal/server/quality"
)

// Run is one run of a data set. Simulated runs never stand in a data set of human ones.
type Run struct {
	Label     string // run-0001 … in order of beginning
	Seed      string // 16 hexadecimal digits
	Group     int
	Order     int
	Simulated bool
	Bundle    string
	Outcome   string
	Excluded  bool
	StartedAt time.Time
	Browser   string
	Records   []run.Record
}

// Exclusion is a decision about a run, with its reason.
type Exclusion struct {
	Run       string    `json:"run"`
	Excluded  bool      `json:"excluded"`
	Rule      string    `json:"rule"`
	Reason    string    `json:"reason"`
	DecidedBy string    `json:"decided_by"`
	DecidedAt time.Time `json:"decided_at"`
}

// DataSet is everything of one study.
type DataSet struct {
	Study      *study.Study
	Bundles    []bundle.Signed // every bundle that the runs were made under
	Keys       bundle.KeySet
	Runs       []Run
	Exclusions []Exclusion
	Simulated  bool // all runs are simulated, and every table says so
	WrittenAt  time.Time
}

// Names of the files in a data set.
const (
	fileRuns       = "runs.csv"
	fileTrials     = "trials.csv"
	fileRecords    = "records.jsonl"
	fileDictionary = "data_dictionary.csv"
	fileKeys       = "keys.json"
	fileExclusions = "exclusions.json"
	fileReadme     = "README.txt"
	bundlePrefix   = "bundles/"
)

// Write writes the data set as a ZIP archive.
func Write(w io.Writer, d *DataSet) error {
	archive := zip.NewWriter(w)
	for _, file := range []struct {
		name  string
		write func(io.Writer) error
	}{
		{fileReadme, d.writeReadme},
		{fileRuns, d.writeRuns},
		{fileTrials, d.writeTrials},
		{fileRecords, d.writeRecords},
		{fileDictionary, writeDictionary},
		{fileKeys, func(w io.Writer) error { return writeJSON(w, d.Keys) }},
		{fileExclusions, func(w io.Writer) error { return writeJSON(w, nonNil(d.Exclusions)) }},
	} {
		if err := add(archive, file.name, d.WrittenAt, file.write); err != nil {
			return err
		}
	}
	for _, signed := range d.Bundles {
		signed.Keys = &d.Keys
		name := bundlePrefix + bundle.Digest([]byte(signed.Bundle)) + ".json"
		if err := add(archive, name, d.WrittenAt, func(w io.Writer) error { return writeJSON(w, signed) }); err != nil {
			return err
		}
	}
	return archive.Close()
}

func nonNil[T any](list []T) []T {
	if list == nil {
		return []T{}
	}
	return list
}

func add(archive *zip.Writer, name string, at time.Time, write func(io.Writer) error) error {
	f, err := archive.CreateHeader(&zip.FileHeader{Name: name, Method: zip.Deflate, Modified: at})
	if err != nil {
		return err
	}
	if err := write(f); err != nil {
		return fmt.Errorf("write %s: %w", name, err)
	}
	return nil
}

func writeJSON(w io.Writer, v any) error {
	encoder := json.NewEncoder(w)
	encoder.SetIndent("", "  ")
	return encoder.Encode(v)
}

func (d *DataSet) writeReadme(w io.Writer) error {
	a := d.Study.About
	kind := "Every run was made by a person."
	if d.Simulated {
		kind = "SIMULATED: every run was made by a simulated observer. These are not data of people."
	}
	_, err := fmt.Fprintf(w, `%s
%s, %s
Contact: %s   Ethics reference: %s   Licence: %s
Written %s

%s

runs.csv             one row for each run, with the measures of its quality
trials.csv           one row for each trial
data_dictionary.csv  every column: meaning, unit, range, missing value
records.jsonl        every record of every run, as it was made
bundles/             the study as it was delivered, with its signature
keys.json            the public keys
exclusions.json      which runs were excluded or included again, by whom and why

"distal bundle verify" checks a bundle offline; "distal replay" re-creates every
trial of this data set, levels and frames, and compares.

Results are research measurements, not a diagnosis.
`, a.Title, a.Investigator, a.Institution, a.Contact, a.EthicsID, a.Licence, d.WrittenAt.UTC().Format(time.RFC3339), kind)
	return err
}

// column is one column of a table, the single source of table and dictionary.
type column[T any] struct {
	name, unit, doc, missing string
	of                       func(T) string
}

// number writes x with the fewest digits that read back as x; nothing for NaN.
func number(x float64) string {
	if math.IsNaN(x) {
		return ""
	}
	return strconv.FormatFloat(x, 'g', -1, 64)
}

type runRow struct {
	d *DataSet
	r *Run
	m quality.Measures
	c map[run.Kind]*run.Record // the last of each kind
}

func runColumns() []column[runRow] {
	columns := []column[runRow]{
		{"run", "", "label of the run, in order of beginning", "", func(r runRow) string { return r.r.Label }},
		{"simulated", "", "true: made by a simulated observer, no data of a person", "", func(r runRow) string { return strconv.FormatBool(r.r.Simulated) }},
		{"outcome", "", "completed, refused, or empty where the run was left", "never ended", func(r runRow) string { return r.r.Outcome }},
		{"excluded", "", "true: excluded by a rule or a person, see exclusions.json", "", func(r runRow) string { return strconv.FormatBool(r.r.Excluded) }},
		{"seed", "", "seed of all random numbers of the run, 16 hexadecimal digits", "", func(r runRow) string { return r.r.Seed }},
		{"group", "", "between-subject group, empty in studies without groups", "no groups", func(r runRow) string {
			if len(r.d.Study.Groups) == 0 {
				return ""
			}
			return r.d.Study.Groups[r.r.Group].Name
		}},
		{"order", "", "running number of the run in the study, selects group and block order", "", func(r runRow) string { return strconv.Itoa(r.r.Order) }},
		{"bundle", "", "SHA-256 of the bundle that the run was made under", "", func(r runRow) string { return r.r.Bundle }},
		{"started_at", "UTC", "server time when the run began", "", func(r runRow) string { return r.r.StartedAt.UTC().Format(time.RFC3339) }},
		{"browser", "", "name and main version of browser, and system", "unknown", func(r runRow) string { return r.r.Browser }},
		{"language", "", "language of the texts", "", func(r runRow) string { return r.c[run.KindConsent].Consent.Language }},
		{"consent_digest", "", "SHA-256 of the text that was agreed to", "", func(r runRow) string { return r.c[run.KindConsent].Consent.TextDigest }},
		{"age_years", "years", "age as stated", "not asked yet", func(r runRow) string {
			if s := r.c[run.KindScreening]; s != nil {
				return strconv.Itoa(s.Screening.AgeYears)
			}
			return ""
		}},
		{"css_px_per_mm", "px/mm", "CSS pixels per mm by the card (ISO/IEC 7810 ID-1), last calibration", "not reached", func(r runRow) string {
			if c := r.c[run.KindCard]; c != nil {
				return number(c.Card.PxPerMm)
			}
			return ""
		}},
		{"device_pixel_ratio", "", "device pixels per CSS pixel", "not reached", func(r runRow) string {
			if c := r.c[run.KindCard]; c != nil {
				return number(c.Card.PixelRatio)
			}
			return ""
		}},
		{"distance_sd_mm", "mm", "standard deviation of the viewing distance, from the settings and from eye to eye", "not reached", func(r runRow) string {
			if c := r.c[run.KindDistance]; c != nil {
				return number(c.Distance.SDMm)
			}
			return ""
		}},
	}
	columns = append(columns, scaleColumns()...)
	for i, m := range quality.Metrics {
		columns = append(columns, column[runRow]{m.Name, m.Unit, m.Doc, "not measured", func(r runRow) string { return number(r.m[i]) }})
	}
	return columns
}

func (d *DataSet) writeRuns(w io.Writer) error {
	columns := runColumns()
	out := csv.NewWriter(w)
	header := names(columns)
	thresholds := thresholdNames(d.Study)
	for _, t := range thresholds {
		header = append(header, t, t+"_low", t+"_high", t+"_note")
	}
	for _, q := range d.Study.Questions {
		header = append(header, "answer_"+q.Name)
	}
	if err := out.Write(header); err != nil {
		return err
	}
	for i := range d.Runs {
		r := &d.Runs[i]
		row := runRow{d, r, quality.Measure(r.Records), lastOfKind(r.Records)}
		line := cells(columns, row)
		for _, t := range quality.Thresholds(d.Study, r.Records) {
			line = append(line, thresholdCells(t)...)
		}
		for _, q := range d.Study.Questions {
			line = append(line, answerCell(row.c[run.KindAnswers], q.Name))
		}
		if err := out.Write(line); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}

// thresholdNames are the columns of a study's thresholds: threshold_BLOCK or threshold_BLOCK_CONDITION.
func thresholdNames(s *study.Study) []string {
	var list []string
	for _, t := range quality.Thresholds(s, nil) {
		name := "threshold_" + t.Block
		if t.Condition != "" {
			name += "_" + t.Condition
		}
		list = append(list, name)
	}
	return list
}

func thresholdCells(t quality.Threshold) []string {
	if !t.Known {
		return []string{"", "", "", t.Explanation}
	}
	finite := func(x float64) string {
		if math.IsInf(x, 0) {
			return ""
		}
		return number(x)
	}
	return []string{number(t.Threshold), finite(t.Low), finite(t.High), t.Explanation}
}

func answerCell(rec *run.Record, name string) string {
	if rec == nil {
		return ""
	}
	for i, n := range rec.Answers.Names {
		if n != name {
			continue
		}
		switch a := rec.Answers.Values[i]; {
		case a.Null:
			return ""
		case a.IsText:
			return a.Text
		case a.IsBool:
			return strconv.FormatBool(a.Number != 0)
		default:
			return number(a.Number)
		}
	}
	return ""
}

func lastOfKind(records []run.Record) map[run.Kind]*run.Record {
	last := map[run.Kind]*run.Record{}
	for i := range records {
		last[records[i].Kind] = &records[i]
	}
	return last
}

type trialRow struct {
	r *Run
	t *run.TrialRecord
	s int // sequence
}

func trialColumns() []column[trialRow] {
	return []column[trialRow]{
		{"run", "", "label of the run", "", func(r trialRow) string { return r.r.Label }},
		{"simulated", "", "true: made by a simulated observer, no data of a person", "", func(r trialRow) string { return strconv.FormatBool(r.r.Simulated) }},
		{"excluded", "", "true: the run is excluded", "", func(r trialRow) string { return strconv.FormatBool(r.r.Excluded) }},
		{"sequence", "", "number of the record in the run", "", func(r trialRow) string { return strconv.Itoa(r.s) }},
		{"trial", "", "number of the trial in the run, from 0; with the seed it selects the random streams", "", func(r trialRow) string { return strconv.Itoa(r.t.Trial) }},
		{"block", "", "name of the block", "", func(r trialRow) string { return r.t.Block }},
		{"condition", "", "name of the condition", "no conditions", func(r trialRow) string { return r.t.Condition }},
		{"track", "", "track of the procedure, −1 outside one", "", func(r trialRow) string { return strconv.Itoa(r.t.Track) }},
		{"practice", "", "true in practice", "", func(r trialRow) string { return strconv.FormatBool(r.t.Practice) }},
		{"catch", "", "true for catch trials", "", func(r trialRow) string { return strconv.FormatBool(r.t.Catch) }},
		{"task", "", "name of the task", "", func(r trialRow) string { return r.t.Task }},
		{"display", "", "name of the display", "", func(r trialRow) string { return r.t.Display }},
		{"level", "the varied parameter's", "level that the procedure chose", "outside a procedure", func(r trialRow) string { return number(r.t.Level) }},
		{"values", "", "JSON: every display parameter that the trial set, choices as their index", "", func(r trialRow) string { return object(r.t.Keys, r.t.Values) }},
		{"truths", "", "JSON: what the display physically was beyond its parameters", "", func(r trialRow) string { return object(r.t.TruthKeys, r.t.Truths) }},
		{"response", "", "name of the choice", "no answer in time, or interrupted", func(r trialRow) string { return r.t.Response }},
		{"correct", "", "1 right, 0 wrong", "no answer was right, or none was given", func(r trialRow) string {
			if r.t.Correct < 0 {
				return ""
			}
			return strconv.Itoa(r.t.Correct)
		}},
		{"rt_ms", "ms", "from stimulus onset to the response event's own time", "no response", func(r trialRow) string { return number(r.t.ResponseMs) }},
		{"input_delay_ms", "ms", "from the answer's event to its handling by the page", "no response by an event, or not told", func(r trialRow) string {
			if r.t.InputDelayMs == 0 {
				return ""
			}
			return number(r.t.InputDelayMs)
		}},
		{"input", "", "keyboard, pointer or touch", "no response", func(r trialRow) string { return r.t.Input }},
		{"onset_ms", "ms", "page clock of the frame that first showed the stimulus; light appears later by a delay that browsers cannot measure", "never shown", func(r trialRow) string { return number(r.t.OnsetMs) }},
		{"offset_ms", "ms", "page clock of the first frame without the stimulus", "never shown", func(r trialRow) string { return number(r.t.OffsetMs) }},
		{"refresh_ms", "ms", "refresh interval that the trial was computed with", "", func(r trialRow) string { return number(r.t.RefreshMs) }},
		{"fixation_frames", "refreshes", "planned duration of the fixation phase", "", func(r trialRow) string { return strconv.Itoa(r.t.FixationSteps) }},
		{"stimulus_frames", "refreshes", "planned duration of the stimulus", "", func(r trialRow) string { return strconv.Itoa(r.t.StimulusSteps) }},
		{"frame_steps", "refreshes", "run-length coded refresh intervals from each presented stimulus frame to the next, the last to the offset: 1x29 2 means 29 on time, then one missed", "never shown", func(r trialRow) string { return run.EncodeSteps(r.t.Steps) }},
		{"intervals_ms", "ms", "JSON: times between these frames", "", func(r trialRow) string { return list(r.t.IntervalsMs) }},
		{"dropped_frames", "refreshes", "missed while the stimulus was shown", "", func(r trialRow) string { return strconv.Itoa(r.t.Dropped) }},
		{"jitter_ms", "ms", "standard deviation of the intervals that were on time", "fewer than two", func(r trialRow) string { return number(r.t.JitterMs) }},
		{"digest", "", "FNV-1a (64 bits) over the display lists of all presented stimulus frames, 16 hexadecimal digits", "", func(r trialRow) string { return r.t.Digest }},
		{"interval_order", "", "what the two intervals were: test or reference", "one presentation", func(r trialRow) string { return r.t.Order }},
		{"place", "", "display at whose place the trial's display was shown", "places are not shuffled", func(r trialRow) string { return r.t.Place }},
		given("response_deg", "deg", "direction that was pointed in, counter-clockwise from rightwards", func(g *run.Given) float64 { return g.ResponseDeg }),
		given("error_deg", "deg", "response_deg from the direction that was right, counter-clockwise, above −180 to 180", func(g *run.Given) float64 { return g.ErrorDeg }),
		given("start", "the answer's", "direction (deg) or setting that the participant began with, drawn at random", func(g *run.Given) float64 { return g.Start }),
		given("setting", "the adjusted parameter's", "setting that was confirmed", func(g *run.Given) float64 { return g.Setting }),
		{"adjustments", "", "JSON: every change of the setting: [number of the stimulus frame that first showed it from 0, setting, ms from stimulus onset]", "not an adjustment", func(r trialRow) string {
			if r.t.Given == nil || len(r.t.Given.AdjustFrames) == 0 {
				return ""
			}
			return table(r.t.Given.AdjustFrames, r.t.Given.AdjustValues, r.t.Given.AdjustMs)
		}},
		given("held_ms", "ms", "how long the key was held in all", func(g *run.Given) float64 { return g.HeldMs }),
		given("first_held_ms", "ms", "how long it was held until it was first let go, 0 if never", func(g *run.Given) float64 { return g.FirstHeldMs }),
		{"held", "ms", "JSON: [from, to] of each time it was held, from stimulus onset", "not held", func(r trialRow) string {
			if r.t.Given == nil || len(r.t.Given.HeldFromMs) == 0 {
				return ""
			}
			return table(r.t.Given.HeldFromMs, r.t.Given.HeldToMs)
		}},
		given("confidence", "", "step of the scale after the answer, 1 is the low end", func(g *run.Given) float64 { return g.Confidence }),
		given("confidence_rt_ms", "ms", "from the appearance of the scale", func(g *run.Given) float64 { return g.SureMs }),
		{"interrupted", "", "what spoiled the trial, which then counts for nothing and was asked again: an event (hidden, escape …), or dropped_frame where the study has such trials repeated", "not interrupted", func(r trialRow) string { return r.t.Interrupted }},
	}
}

// given is a column of what an answer consists of besides a choice.
func given(name, unit, doc string, of func(*run.Given) float64) column[trialRow] {
	return column[trialRow]{name, unit, doc, "not part of the task, or no answer", func(r trialRow) string {
		if r.t.Given == nil {
			return ""
		}
		return number(of(r.t.Given))
	}}
}

// table is a JSON list of rows made of columns of equal length.
func table(columns ...[]float64) string {
	rows := make([]value.Value, len(columns[0]))
	for i := range rows {
		var row []float64
		for _, c := range columns {
			row = append(row, c[i])
		}
		rows[i] = value.Numbers(row)
	}
	text, err := value.Canonical(value.List(rows...))
	if err != nil {
		return ""
	}
	return string(text)
}

func object(keys []string, numbers []float64) string {
	members := make([]value.Member, len(keys))
	for i := range keys {
		members[i] = value.Member{Key: keys[i], Value: value.Number(numbers[i])}
	}
	text, err := value.Canonical(value.Object(members...))
	if err != nil {
		return ""
	}
	return string(text)
}

func list(numbers []float64) string {
	text, err := value.Canonical(value.Numbers(numbers))
	if err != nil {
		return ""
	}
	return string(text)
}

func (d *DataSet) writeTrials(w io.Writer) error {
	columns := trialColumns()
	out := csv.NewWriter(w)
	if err := out.Write(names(columns)); err != nil {
		return err
	}
	for i := range d.Runs {
		for j := range d.Runs[i].Records {
			rec := &d.Runs[i].Records[j]
			if rec.Kind != run.KindTrial {
				continue
			}
			if err := out.Write(cells(columns, trialRow{&d.Runs[i], rec.Trial, rec.Sequence})); err != nil {
				return err
			}
		}
	}
	out.Flush()
	return out.Error()
}

func names[T any](columns []column[T]) []string {
	list := make([]string, len(columns))
	for i, c := range columns {
		list[i] = c.name
	}
	return list
}

func cells[T any](columns []column[T], row T) []string {
	list := make([]string, len(columns))
	for i, c := range columns {
		list[i] = safeCell(c.of(row))
	}
	return list
}

// safeCell keeps spreadsheet programs from taking a text for a formula.
func safeCell(s string) string {
	if s == "" {
		return s
	}
	switch s[0] {
	case '=', '@', '\t', '\r':
		return "'" + s
	case '+', '-':
		if _, err := strconv.ParseFloat(s, 64); err != nil {
			return "'" + s
		}
	}
	return s
}

func writeDictionary(w io.Writer) error {
	out := csv.NewWriter(w)
	rows := [][]string{{"table", "column", "unit", "meaning", "empty_means"}}
	for _, c := range runColumns() {
		rows = append(rows, []string{fileRuns, c.name, c.unit, c.doc, c.missing})
	}
	rows = append(rows,
		[]string{fileRuns, "threshold_*", "the varied parameter's", "threshold with 95 % interval: for levels on a log scale Weibull, 1 − 1/e of the way from guessing to the top, mean and central credible interval of a posterior (slopes log-normal, median 3.5, sd 0.5 of the natural logarithm; lapse rates Beta(2, 98) up to 0.1); on a linear scale cumulative Gaussian, half the way, by maximum likelihood with profile interval; where neither of two answers is right, the level at which both are equally likely; columns for each block and condition", "none can be given: see the note"},
		[]string{fileRuns, "threshold_*_low, threshold_*_high", "the varied parameter's", "95 % interval by profile likelihood", "the data set no limit on this side"},
		[]string{fileRuns, "threshold_*_note", "", "what may be said about the fit, in words", ""},
		[]string{fileRuns, "answer_*", "", "answer to the question of this name", "left out or not reached"})
	for _, c := range trialColumns() {
		rows = append(rows, []string{fileTrials, c.name, c.unit, c.doc, c.missing})
	}
	if err := out.WriteAll(rows); err != nil {
		return err
	}
	return nil
}

// line is one line of records.jsonl.
type line struct {
	Run       string          `json:"run"`
	Seed      string          `json:"seed,omitempty"` // with the first record of a run
	Group     int             `json:"group"`
	Order     int             `json:"order"`
	Bundle    string          `json:"bundle,omitempty"`
	Simulated bool            `json:"simulated"`
	Record    json.RawMessage `json:"record"`
}

func (d *DataSet) writeRecords(w io.Writer) error {
	encoder := json.NewEncoder(w)
	for i := range d.Runs {
		r := &d.Runs[i]
		for j := range r.Records {
			body, err := value.Canonical(r.Records[j].Encode())
			if err != nil {
				return err
			}
			if err := encoder.Encode(line{r.Label, r.Seed, r.Group, r.Order, r.Bundle, r.Simulated, body}); err != nil {
				return err
			}
		}
	}
	return nil
}

// ErrNotDataSet says that a file is not a data set.
var ErrNotDataSet = errors.New("this is not a data set of distal export")

// Open reads what replay needs from a data set: bundles, keys and every run's records.
func Open(r io.ReaderAt, size int64) (*DataSet, error) {
	archive, err := zip.NewReader(r, size)
	if err != nil {
		return nil, fmt.Errorf("%w: %v", ErrNotDataSet, err)
	}
	d := &DataSet{}
	for _, f := range archive.File {
		switch {
		case f.Name == fileKeys:
			err = readFile(f, func(text []byte) error { return json.Unmarshal(text, &d.Keys) })
		case f.Name == fileRecords:
			err = readFile(f, d.readRecords)
		case len(f.Name) > len(bundlePrefix) && f.Name[:len(bundlePrefix)] == bundlePrefix:
			err = readFile(f, func(text []byte) error {
				signed, err := bundle.ReadFile(text)
				d.Bundles = append(d.Bundles, signed)
				return err
			})
		}
		if err != nil {
			return nil, fmt.Errorf("read %s: %w", f.Name, err)
		}
	}
	if len(d.Bundles) == 0 {
		return nil, ErrNotDataSet
	}
	return d, nil
}

const maxFile = 4 << 30

func readFile(f *zip.File, use func([]byte) error) error {
	if f.UncompressedSize64 > maxFile {
		return errors.New("the file is too large")
	}
	r, err := f.Open()
	if err != nil {
		return err
	}
	defer r.Close()
	text, err := io.ReadAll(r)
	if err != nil {
		return err
	}
	return use(text)
}

func (d *DataSet) readRecords(text []byte) error {
	at := map[string]int{}
	for n, raw := range bytes.Split(text, []byte("\n")) {
		if len(raw) == 0 {
			continue
		}
		var l line
		if err := json.Unmarshal(raw, &l); err != nil {
			return fmt.Errorf("line %d: %w", n+1, err)
		}
		tree, err := value.ParseJSON(l.Record)
		if err != nil {
			return fmt.Errorf("line %d: %w", n+1, err)
		}
		rec, err := run.DecodeRecord(tree)
		if err != nil {
			return fmt.Errorf("line %d: %w", n+1, err)
		}
		i, ok := at[l.Run]
		if !ok {
			i = len(d.Runs)
			at[l.Run] = i
			d.Runs = append(d.Runs, Run{Label: l.Run, Seed: l.Seed, Group: l.Group, Order: l.Order, Bundle: l.Bundle, Simulated: l.Simulated})
		}
		d.Runs[i].Records = append(d.Runs[i].Records, *rec)
	}
	return nil
}
