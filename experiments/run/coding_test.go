package run_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"pgregory.net/rapid"

	"distal/experiments/run"
	"distal/experiments/value"
)

// examples are one record of each kind as they stand on the wire.
func examples(t testing.TB) map[string]string {
	t.Helper()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 6})
	p.apply(p.answer(run.StepConsent))
	p.apply(run.Record{Kind: run.KindEvent, AtMs: 1.7e12, Event: &run.Event{Name: "zoomed", Detail: "1.25"}})
	p.untilBlock("tracks")
	p.apply(p.trial("", "hidden"))
	p.untilKind(run.StepDone)
	p.apply(run.Record{Kind: run.KindWithdrawal})
	refusal := run.Record{Sequence: 3, Kind: run.KindRefusal, Refusal: &run.Refusal{Step: "display_check", Reason: run.ReasonRefreshLow, Detail: "30 Hz, 50 Hz needed"}}
	texts := map[string]string{"refusal": wire(t, refusal.Encode())}
	for i := range p.records {
		rec := &p.records[i]
		name := run.KindNames[rec.Kind]
		if rec.Kind == run.KindTrial && rec.Trial.Interrupted != "" {
			name = "interrupted trial"
		}
		texts[name] = wire(t, rec.Encode())
	}
	return texts
}

func TestRecordsOfEveryKindComeBack(t *testing.T) {
	t.Parallel()
	texts := examples(t)
	if len(texts) != len(run.KindNames)+1 {
		t.Fatalf("%d kinds, want %d", len(texts)-1, len(run.KindNames))
	}
	for name, text := range texts {
		rec, err := decode(text)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		if again := wire(t, rec.Encode()); again != text {
			t.Errorf("%s:\n%s\ncame back as\n%s", name, text, again)
		}
	}
	trial := texts["interrupted trial"]
	for _, part := range []string{`"response":null`, `"rt_ms":null`, `"correct":null`, `"frame_steps":"1 2 1"`, `"interrupted":"hidden"`, `"dropped_frames":1`} {
		if !strings.Contains(trial, part) {
			t.Errorf("%s is missing in %s", part, trial)
		}
	}
}

// finite draws numbers that JSON can hold.
func finite(t *rapid.T, name string) float64 {
	return rapid.Float64Range(-1e300, 1e300).Draw(t, name)
}

func finiteOrNaN(t *rapid.T, name string) float64 {
	if rapid.Bool().Draw(t, name+" is null") {
		return math.NaN()
	}
	return finite(t, name)
}

func uniqueNames(t *rapid.T, name string) []string {
	names := rapid.SliceOfNDistinct(rapid.StringN(0, 12, -1), 0, 5, rapid.ID[string]).Draw(t, name)
	slices.SortFunc(names, func(a, b string) int { return strings.Compare(a, b) })
	return names
}

func numbersFor(t *rapid.T, names []string) []float64 {
	list := make([]float64, len(names))
	for i := range list {
		list[i] = finite(t, "number")
	}
	return list
}

func drawTrial(t *rapid.T) *run.TrialRecord {
	text := func(name string) string { return rapid.String().Draw(t, name) }
	whole := func(name string) int { return rapid.IntRange(-1000, 1000).Draw(t, name) }
	r := &run.TrialRecord{
		Block: text("block"), Trial: whole("trial"), Track: whole("track"), Practice: rapid.Bool().Draw(t, "practice"),
		Catch: rapid.Bool().Draw(t, "catch"), Task: text("task"), Display: text("display"), Condition: text("condition"),
		Keys: uniqueNames(t, "keys"), Level: finiteOrNaN(t, "level"), TruthKeys: uniqueNames(t, "truths"),
		Response: text("response"), Correct: rapid.IntRange(-1, 1).Draw(t, "correct"), ResponseMs: finiteOrNaN(t, "rt"),
		Input: text("input"), OnsetMs: finiteOrNaN(t, "onset"), OffsetMs: finiteOrNaN(t, "offset"),
		RefreshMs: rapid.Float64Range(1e-3, 1e3).Draw(t, "refresh"), FixationSteps: whole("fixation"), StimulusSteps: whole("stimulus"),
		Steps:       rapid.SliceOf(rapid.SampledFrom([]int{1, 1, 1, 2, 3, 40})).Draw(t, "steps"),
		IntervalsMs: rapid.SliceOf(rapid.Float64Range(0, 1000)).Draw(t, "intervals"), Dropped: whole("dropped"),
		JitterMs: finiteOrNaN(t, "jitter"), Digest: text("digest"), Interrupted: text("interrupted"),
	}
	r.Values, r.Truths = numbersFor(t, r.Keys), numbersFor(t, r.TruthKeys)
	return r
}

// Any trial goes through its wire form without loss; NaN is null there.
func TestTrialCoding(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		rec := &run.Record{
			Sequence: rapid.IntRange(1, 1e6).Draw(t, "sequence"), Kind: run.KindTrial, AtMs: finite(t, "at"),
			Bundle: rapid.String().Draw(t, "bundle"), Trial: drawTrial(t),
		}
		got, err := decode(wire(t, rec.Encode()))
		if err != nil {
			t.Fatal(err)
		}
		// The canonical form sorts keys by UTF-16 units, the names here by bytes.
		byKey := func(keys []string, numbers []float64) map[string]float64 {
			m := map[string]float64{}
			for i := range keys {
				m[keys[i]] = numbers[i]
			}
			return m
		}
		for _, pair := range [][2]map[string]float64{
			{byKey(rec.Trial.Keys, rec.Trial.Values), byKey(got.Trial.Keys, got.Trial.Values)},
			{byKey(rec.Trial.TruthKeys, rec.Trial.Truths), byKey(got.Trial.TruthKeys, got.Trial.Truths)},
		} {
			if diff := cmp.Diff(pair[0], pair[1]); diff != "" {
				t.Fatal(diff)
			}
		}
		ignore := cmpopts.IgnoreFields(run.TrialRecord{}, "Keys", "Values", "TruthKeys", "Truths")
		if diff := cmp.Diff(rec, got, cmpopts.EquateNaNs(), cmpopts.EquateEmpty(), ignore); diff != "" {
			t.Fatal(diff)
		}
	})
}

// Numbers keep every bit on the wire.
func TestNumbersKeepEveryBit(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		bits := rapid.Uint64().Draw(t, "bits")
		x := math.Float64frombits(bits)
		if math.IsNaN(x) || math.IsInf(x, 0) || x == 0 {
			return
		}
		rec := run.Record{Sequence: 1, Kind: run.KindInstructions, AtMs: x}
		got, err := decode(wire(t, rec.Encode()))
		if err != nil {
			t.Fatal(err)
		}
		if math.Float64bits(got.AtMs) != bits {
			t.Fatalf("%x came back as %x", bits, math.Float64bits(got.AtMs))
		}
	})
}

func TestRecordsRefused(t *testing.T) {
	t.Parallel()
	texts := examples(t)
	for _, c := range []struct{ kind, old, now, want string }{
		{"consent", `"items":3`, `"items":"3"`, "items must be a number, not text"},
		{"consent", `"items":3`, `"items":1.5`, "items must be a whole number"},
		{"consent", `"items":3`, `"items":1e12`, "items must be a whole number"},
		{"consent", `"items":3,`, ``, "items is missing"},
		{"consent", `"items":3`, `"items":3,"mood":"fine"`, `key "mood" is not known in this kind of record`},
		{"consent", `"kind":"consent"`, `"kind":"assent"`, `kind "assent" is not known`},
		{"consent", `"kind":"consent"`, `"kind":4`, "kind must be text, not a number"},
		{"consent", `"sequence":1`, `"sequence":0`, "sequence must be 1 or more"},
		{"consent", `"bundle":"b"`, `"bundle":null`, "bundle must be text, not nothing"},
		{"consent", `"bundle":"b"`, `"bundle":"` + strings.Repeat("b", 20_001) + `"`, "bundle is too long"},
		{"consent", `"at_ms":0`, `"at_ms":"now"`, "at_ms must be a number"},
		{"screening", `"sight":true`, `"sight":1`, "answers.sight must be true or false"},
		{"card", `"css_px_per_mm":3.5`, `"css_px_per_mm":-3.5`, "css_px_per_mm must be above 0"},
		{"card", `[300,302,301]`, `[300,"302",301]`, "widths_css_px must hold numbers"},
		{"card", `[300,302,301]`, `300`, "widths_css_px must be a list"},
		{"display_check", `"float_target":true`, `"float_target":1`, "float_target must be true or false"},
		{"answers", `"both"`, `["both"]`, "answers.eyes must be text"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"1  2"`, "frame_steps: \"\" is not a step"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"0"`, "is not a step"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"1x1"`, "is not a repeated step"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"1x99999999999"`, "more than 100000 refresh intervals"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"1000x100 1"`, "more than 100000 refresh intervals"},
		{"trial", `"frame_steps":"1 2 1"`, `"frame_steps":"100000 1"`, "more than 100000 refresh intervals"},
		{"trial", `"refresh_ms":16.6`, `"refresh_ms":-16.6`, "refresh_ms must be above 0"},
		{"trial", `"level":`, `"level":"x","levels":`, "level must be a number, not text"},
		{"trial", `"correct":true`, `"correct":1`, "correct must be true or false"},
		{"trial", `"values":{`, `"values":{"a":null,`, "values.a must be a number"},
		{"trial", `"intervals_ms":[`, `"intervals_ms":[` + strings.Repeat("1,", 100_000), "intervals_ms has too many numbers"},
		{"trial", `"truths":{`, `"truths":{"dots":1,"dots":2,`, "dots"}, // a key twice
	} {
		if !strings.Contains(texts[c.kind], c.old) {
			t.Errorf("%s holds no %s: %s", c.kind, c.old, texts[c.kind])
			continue
		}
		_, err := decode(strings.Replace(texts[c.kind], c.old, c.now, 1))
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s with %.40s: got %v, want %s", c.kind, c.now, err, c.want)
		}
	}
	for _, text := range []string{`[]`, `"x"`, `null`, `{}`, ``, `{"sequence":1}`} {
		if _, err := decode(text); err == nil {
			t.Errorf("%q was accepted", text)
		}
	}
}

func TestStepsCoding(t *testing.T) {
	t.Parallel()
	for text, steps := range map[string][]int{
		"":            nil,
		"1":           {1},
		"2 1":         {2, 1},
		"1x3 2 1x2":   {1, 1, 1, 2, 1, 1},
		"3x2 1":       {3, 3, 1},
		"100000":      {100_000},
		"1 2 3 4 5x2": {1, 2, 3, 4, 5, 5},
	} {
		if got := run.EncodeSteps(steps); got != text {
			t.Errorf("%v: %q, want %q", steps, got, text)
		}
		if got, err := run.DecodeSteps(text); err != nil || !slices.Equal(got, steps) {
			t.Errorf("%q: %v %v", text, got, err)
		}
	}
	longest := slices.Repeat([]int{1}, 100_000)
	if got, err := run.DecodeSteps("1x100000"); err != nil || !slices.Equal(got, longest) {
		t.Errorf("the longest: %v", err)
	}
}

// FuzzDecodeRecord: no text makes the reader panic, and what it reads it
// writes in a form that it reads again as the same.
func FuzzDecodeRecord(f *testing.F) {
	for _, text := range examples(f) {
		f.Add(text)
	}
	f.Add(`{"sequence":1,"kind":"trial","frame_steps":"1x2x3"}`)
	f.Add(`{"sequence":1e400}`)
	f.Fuzz(func(t *testing.T, text string) {
		rec, err := decode(text)
		if err != nil {
			if err.Error() == "" {
				t.Fatal("an error without words")
			}
			return
		}
		first := wire(t, rec.Encode())
		again, err := decode(first)
		if err != nil {
			t.Fatalf("%v: %s", err, first)
		}
		if second := wire(t, again.Encode()); second != first {
			t.Fatalf("%s\ncame back as\n%s", first, second)
		}
	})
}

// FuzzApply: no record that can be read makes a run panic, at any point of it.
func FuzzApply(f *testing.F) {
	for _, text := range examples(f) {
		f.Add(text, byte(6))
		f.Add(text, byte(0))
	}
	s := readStudy(f, motley)
	f.Fuzz(func(t *testing.T, text string, at byte) {
		rec, err := decode(text)
		if err != nil {
			return
		}
		p := begin(t, s, run.Assignment{Seed: 6})
		n := 0
		p.until(func(step run.Step) bool { n++; return n > int(at) || step.Kind == run.StepDone })
		before := wire(t, p.run.Next().Encode(s))
		rec.Sequence = p.run.Sequence() + 1
		if err := p.run.Apply(rec); err != nil && wire(t, p.run.Next().Encode(s)) != before {
			t.Fatalf("%v, but the run has changed", err)
		}
		p.run.Next()
	})
}

// FuzzDecodeMeasurement: what the engine takes as a measurement it can write as
// a record that it reads again.
func FuzzDecodeMeasurement(f *testing.F) {
	f.Add(`{"response":"left","rt_ms":512.3,"input":"keyboard","onset_ms":1,"offset_ms":2,"frame_steps":[1,2,1],"intervals_ms":[16.7,33.3,16.7],"interrupted":""}`)
	f.Add(`{"response":null,"rt_ms":null,"input":"","onset_ms":null,"offset_ms":null,"frame_steps":[],"intervals_ms":[],"interrupted":"escape"}`)
	f.Add(`{"frame_steps":[1e9]}`)
	f.Add(`[]`)
	p := begin(f, readStudy(f, motley), run.Assignment{Seed: 6})
	p.untilBlock("tracks")
	f.Fuzz(func(t *testing.T, text string) {
		tree, err := value.ParseJSON([]byte(text))
		if err != nil {
			return
		}
		m, err := run.DecodeMeasurement(tree)
		if err != nil {
			return
		}
		p.run.BeginTrial()
		rec := run.Record{Sequence: 1, Kind: run.KindTrial, Trial: p.run.FinishTrial(m)}
		if _, err := decode(wire(t, rec.Encode())); err != nil {
			t.Fatal(err)
		}
	})
}

// FuzzCalibrate: no request makes the calibration panic or give what JSON cannot hold.
func FuzzCalibrate(f *testing.F) {
	s := readStudy(f, motley)
	for _, text := range []string{
		`{"of":"card","widths_css_px":[300,301,302],"device_pixel_ratio":1.5}`,
		`{"of":"card","widths_css_px":[0,0,0],"device_pixel_ratio":1}`,
		`{"of":"card","widths_css_px":[1e308,1e308,1e308],"device_pixel_ratio":1}`,
		`{"of":"distance","offsets_mm":[158,160,159]}`,
		`{"of":"distance","offsets_mm":[-1e308,1e308,1e308]}`,
		`{"of":"distance","offsets_mm":[]}`,
		`{"of":"refresh","intervals_ms":[16,17,17,16,17,17,16,17,17,16,17,17]}`,
		`{"of":"refresh","intervals_ms":[1e-300,1e300,1,1,1,1,1,1,1,1,1]}`,
		`{"of":"field","width_mm":500,"height_mm":300,"distance_mm":570}`,
		`{"of":"check"}`,
	} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		tree, err := value.ParseJSON([]byte(text))
		if err != nil {
			return
		}
		v, err := run.Calibrate(s, tree)
		if err != nil {
			return
		}
		if _, err := value.Canonical(v); err != nil {
			t.Fatalf("%s: %v", text, err)
		}
	})
}
