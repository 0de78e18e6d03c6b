package main

import (
	"archive/zip"
	"bytes"
	"context"
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/input"
	"github.com/chromedp/chromedp"

	"distal/experiments/library"
	"distal/experiments/random"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/export"
)

// everyAnswer makes one short study of the library's tasks, two trials of each:
// one is answered with keys, the other with the pointer.
func everyAnswer(t *testing.T) func(*study.Study) {
	t.Helper()
	return func(s *study.Study) {
		s.Screen.Distance, s.Screen.StatedDistanceMm, s.Screen.CardRepeats = study.StatedDistance, 570, 1
		s.Screen.MinWidthDeg = 14
		s.Exclusions, s.Questions, s.Blocks = nil, nil, nil
		s.Tasks, s.Displays, s.Procedures = nil, nil, nil
		for _, name := range []string{"direction-pointing", "interval-coherence", "speed-matching", "speed-same-different", "after-effect-duration", "speed-reminder"} {
			from, problems := library.Read(name)
			if problems.Failed() {
				t.Fatal(problems)
			}
			first := len(s.Displays)
			for _, d := range from.Displays {
				d.Name = fmt.Sprintf("%s-%d", d.Name, len(s.Displays))
				s.Displays = append(s.Displays, d)
			}
			task := from.Tasks[0]
			task.Name = name
			task.Display += first
			task.Beside = slices.Clone(task.Beside)
			for i := range task.Beside {
				task.Beside[i] += first
			}
			task.FixationMs, task.IntertrialMs, task.Intervals.GapMs = 100, 50, 100
			task.Feedback = study.NoFeedback
			b := study.Block{Name: name, Kind: study.Measurement, Task: len(s.Tasks), Procedure: -1, Trials: 2}
			switch task.Answer.By {
			case study.ByHolding:
				task.StimulusMs = 1500
				b.Fixed = []study.Setting{{Key: "adapt_ms", Value: 300}}
			case study.ByChoice, study.ByDial:
				task.StimulusMs = 150
			}
			if name == "speed-reminder" {
				b.Balance = from.Blocks[1].Balance
			}
			s.Tasks, s.Blocks = append(s.Tasks, task), append(s.Blocks, b)
		}
	}
}

// Every way to answer, with real keys and a real pointer; the data set replays.
func TestEveryWayToAnswer(t *testing.T) {
	l := startLab(t, "motion-coherence", everyAnswer(t))
	w := &answerer{&participant{
		t: t, ctx: browser(t, 1280, 800), lab: l, draw: random.New(7, 0, random.PurposeObserver), pictures: os.Getenv("DISTAL_TEST_PICTURES"),
	}}
	w.do(emulation.SetDeviceMetricsOverride(1280, 800, 1, false), chromedp.Navigate(l.url+"/s/"+l.study.Link))
	w.consent()
	w.screening()
	w.card()
	w.distance()
	w.check()
	ways := map[string][2]func(){
		"direction-pointing":    {w.pointWithKeys, w.pointWithPointer},
		"interval-coherence":    {w.choose("Digit3", "ArrowLeft"), w.press("choice-second", "confidence-2")},
		"speed-matching":        {w.adjustWithKeys, w.adjustWithPointer},
		"speed-same-different":  {w.choose("", "ArrowLeft"), w.press("choice-different", "")},
		"after-effect-duration": {w.holdWithKey, w.holdWithPointer},
		"speed-reminder":        {w.choose("", "ArrowRight"), w.press("choice-no", "")},
	}
	trial := 0
	for _, b := range l.spec.Blocks {
		for _, answer := range ways[b.Name] {
			w.untilPhase(trial, "answer")
			answer()
			trial++
		}
	}
	w.finish()
	w.checkGiven()
	checkExported(t, l)
}

type answerer struct{ *participant }

// untilPhase waits for a phase of a trial, going on from breaks.
func (w *answerer) untilPhase(number int, phase string) {
	w.t.Helper()
	want := fmt.Sprintf("trial %d %s", number, phase)
	for range 1000 {
		switch where := w.where(); where {
		case want:
			return
		case "page-break":
			w.click("continue")
			w.do(chromedp.Poll(`!document.querySelector('`+id("page-break")+`')`, nil, chromedp.WithPollingInterval(20*time.Millisecond)))
		case "page-interrupted":
			w.t.Fatalf("trial %d was interrupted", number)
		}
		time.Sleep(15 * time.Millisecond)
	}
	w.t.Fatalf("no %q comes: %s", want, w.where())
}

func (w *answerer) phase(name string) {
	w.t.Helper()
	w.do(chromedp.Poll(`document.querySelector("canvas")?.dataset.phase === "`+name+`"`, nil, chromedp.WithPollingInterval(15*time.Millisecond)))
}

// mouse sends one pointer event; moves are made with the button down.
func (w *answerer) mouse(kind input.MouseType, x, y float64) {
	w.t.Helper()
	e := input.DispatchMouseEvent(kind, x, y).WithButton(input.Left).WithButtons(1)
	if kind != input.MouseMoved {
		e = e.WithClickCount(1)
	}
	w.do(e)
}

// box is the middle and the width of an element.
func (w *answerer) box(name string) (x, y, width float64) {
	w.t.Helper()
	var box []float64
	w.do(chromedp.Evaluate(`(() => { const b = document.querySelector('`+id(name)+`').getBoundingClientRect(); return [b.x + b.width/2, b.y + b.height/2, b.width]; })()`, &box))
	return box[0], box[1], box[2]
}

func (w *answerer) tap(name string) {
	w.t.Helper()
	x, y, _ := w.box(name)
	w.mouse(input.MousePressed, x, y)
	w.mouse(input.MouseReleased, x, y)
}

func (w *answerer) pointWithKeys() {
	w.key("ArrowLeft", "ArrowLeft", false)
	w.key("ArrowLeft", "ArrowLeft", false)
	w.key("ArrowRight", "ArrowRight", true)
	w.key("Enter", "Enter", false)
}

// dialDeg is where the pointer ends.
const dialDeg = 60

func (w *answerer) pointWithPointer() {
	x, y, width := w.box("dial")
	at := func(deg float64) (float64, float64) {
		return x + 0.4*width*math.Cos(deg*math.Pi/180), y - 0.4*width*math.Sin(deg*math.Pi/180)
	}
	px, py := at(200)
	w.mouse(input.MousePressed, px, py)
	px, py = at(dialDeg)
	w.mouse(input.MouseMoved, px, py)
	w.mouse(input.MouseReleased, px, py)
	w.picture("dial")
	w.tap("answer-done")
}

func (w *answerer) choose(confidence, code string) func() {
	return func() {
		w.key(code, code, false)
		if confidence != "" {
			w.phase("confidence")
			w.picture("confidence")
			w.key(confidence, confidence, false)
		}
	}
}

func (w *answerer) press(choice, confidence string) func() {
	return func() {
		w.tap(choice)
		if confidence != "" {
			w.phase("confidence")
			w.tap(confidence)
		}
	}
}

func (w *answerer) adjustWithKeys() {
	w.picture("adjustment")
	for range 2 {
		w.key("ArrowRight", "ArrowRight", false)
	}
	w.key("ArrowLeft", "ArrowLeft", true)
	w.do(chromedp.Sleep(100 * time.Millisecond))
	w.key("Space", " ", false)
}

func (w *answerer) adjustWithPointer() {
	w.mouse(input.MousePressed, 500, 300)
	for i := range 4 {
		w.mouse(input.MouseMoved, 500+40*float64(i+1), 300)
	}
	w.mouse(input.MouseReleased, 660, 300)
	w.tap("answer-less")
	w.do(chromedp.Sleep(100 * time.Millisecond))
	w.tap("answer-done")
}

func (w *answerer) holdWithKey() {
	for range 2 {
		w.do(input.DispatchKeyEvent(input.KeyRawDown).WithCode("Space").WithKey(" "), chromedp.Sleep(200*time.Millisecond),
			input.DispatchKeyEvent(input.KeyUp).WithCode("Space").WithKey(" "), chromedp.Sleep(50*time.Millisecond))
	}
	w.phase("confidence")
	w.key("Digit1", "1", false)
}

func (w *answerer) holdWithPointer() {
	x, y, _ := w.box("answer-hold")
	w.mouse(input.MousePressed, x, y)
	w.picture("hold")
	w.phase("confidence") // held to the end
	w.mouse(input.MouseReleased, x, y)
	w.tap("confidence-3")
}

// checkGiven compares the stored trials with what keys and pointer did.
func (w *answerer) checkGiven() {
	t := w.t
	var trials []*run.TrialRecord
	_, records, _ := w.state()
	for i := range records {
		if records[i].Trial != nil {
			trials = append(trials, records[i].Trial)
		}
	}
	if len(trials) != 12 {
		t.Fatalf("%d trials", len(trials))
	}
	near := func(what string, got, want, within float64) {
		t.Helper()
		if !(math.Abs(got-want) <= within) {
			t.Errorf("%s: %v, want %v within %v", what, got, want, within)
		}
	}
	inputs := make([]string, len(trials))
	for i, r := range trials {
		inputs[i] = r.Input
	}
	if want := slices.Repeat([]string{"keyboard", "pointer"}, 6); !slices.Equal(inputs, want) {
		t.Errorf("inputs %v", inputs)
	}
	g := func(i int) *run.Given { return trials[i].Given }
	near("keys on the dial", g(0).ResponseDeg, math.Mod(g(0).Start+19, 360), 1e-9)
	near("pointer on the dial", g(1).ResponseDeg, dialDeg, 0.5)
	near("confidence by key", g(2).Confidence, 3, 0)
	near("confidence by pointer", g(3).Confidence, 2, 0)
	if trials[3].Response != "second" || trials[3].Order == "" {
		t.Errorf("the second interval: %q in %q", trials[3].Response, trials[3].Order)
	}
	near("steps of an adjustment", math.Log10(g(4).Setting/g(4).Start), min(0.12, math.Log10(16/g(4).Start))-0.015, 1e-9)
	// A drag over 160 of 1280 px is an eighth of the range from 1 to 16 Hz.
	near("drag and button", math.Log10(g(5).Setting/g(5).Start), min(math.Log10(16)/8, math.Log10(16/g(5).Start))-0.06, 1e-9)
	if n := len(g(5).AdjustValues); n < 2 {
		t.Errorf("%d changes by pointer", n)
	}
	if len(g(8).HeldFromMs) != 2 || g(8).FirstHeldMs < 100 || g(8).HeldMs <= g(8).FirstHeldMs {
		t.Errorf("held by key: %+v", g(8))
	}
	near("held to the end", g(9).HeldToMs[0], trials[9].OffsetMs-trials[9].OnsetMs, 0.02)
	if trials[10].Response != "yes" || trials[11].Response != "no" || trials[11].Order != "reference test" {
		t.Errorf("reminder: %+v", trials[11])
	}
}

// checkExported writes the data set, reads it back and re-creates every trial.
func checkExported(t *testing.T, l *lab) {
	t.Helper()
	d, err := export.Collect(context.Background(), l.app.store, l.id, l.study.ID, false, time.Now())
	if err != nil {
		t.Fatal(err)
	}
	var archive bytes.Buffer
	if err := export.Write(&archive, d); err != nil {
		t.Fatal(err)
	}
	again, err := export.Open(bytes.NewReader(archive.Bytes()), int64(archive.Len()))
	if err != nil {
		t.Fatal(err)
	}
	if replayed := again.Replay(func(int, int) {}); !replayed.OK() || replayed.Trials != 12 {
		t.Errorf("replay: %+v", replayed)
	}
	files, err := zip.NewReader(bytes.NewReader(archive.Bytes()), int64(archive.Len()))
	if err != nil {
		t.Fatal(err)
	}
	f, err := files.Open("trials.csv")
	if err != nil {
		t.Fatal(err)
	}
	text, err := io.ReadAll(f)
	if err != nil {
		t.Fatal(err)
	}
	rows, err := csv.NewReader(bytes.NewReader(text)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	filled := map[string]int{}
	for _, row := range rows[1:] {
		for i, cell := range row {
			if cell != "" {
				filled[rows[0][i]]++
			}
		}
	}
	for column, n := range map[string]int{
		"interval_order": 6, "response_deg": 2, "error_deg": 2, "start": 4, "setting": 2, "adjustments": 2, "held_ms": 2, "first_held_ms": 2, "held": 2, "confidence": 4, "confidence_rt_ms": 4,
	} {
		if filled[column] != n {
			t.Errorf("column %s has %d cells, want %d", column, filled[column], n)
		}
	}
}
