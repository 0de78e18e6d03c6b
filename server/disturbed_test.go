package main

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/chromedp"
	"github.com/chromedp/chromedp/kb"

	"distal/experiments/replay"
	"distal/experiments/run"
	"distal/experiments/study"
)

// What can happen to a display while it is shown: each ends in a marked trial
// that is asked again, and is in the record.
func TestDisturbedTrials(t *testing.T) {
	l, _, address := startPages(t, func(s *study.Study) {
		s.Tasks[0].FixationMs, s.Tasks[0].FixationJitterMs, s.Tasks[0].StimulusMs = 200, 0, 2500
		s.Screen.Distance, s.Screen.StatedDistanceMm = study.StatedDistance, 570
		s.Blocks[0].Practice.Correct, s.Blocks[0].Practice.MaxTrials = 0, 1
	})
	w := newWalker(t, l, address)
	w.consent()
	w.screening()
	w.card()
	w.distance()
	w.check()
	w.see("page-break")
	w.click("continue")

	troubles := []struct {
		name, interrupted string
		cause             chromedp.Action
		end               chromedp.Action // nil: nothing is to be undone
	}{
		{"the participant presses Escape", "escape", chromedp.KeyEvent(kb.Escape), nil},
		{"another window takes the focus", "focus_lost", script(`dispatchEvent(new Event("blur"))`), script(`dispatchEvent(new Event("focus"))`)},
		{"full screen ends", "fullscreen_left", script(`document.exitFullscreen()`), nil},
		{"the driver restarts", "context_lost", script(`(window.lose = document.querySelector("canvas").getContext("webgl2").getExtension("WEBGL_lose_context")).loseContext()`), script(`window.lose.restoreContext()`)},
		{"the device sleeps", "held_up", script(`for (const t = performance.now(); performance.now() < t + 1400;);`), nil},
		{"the window gets another size", "resized", emulation.SetDeviceMetricsOverride(1200, 760, 1, false), nil},
		{"the window goes to a screen with another pixel ratio", "zoomed", emulation.SetDeviceMetricsOverride(1200, 760, 1.25, false), nil},
	}
	for number, trouble := range troubles {
		w.untilRunning(number)
		if number == 0 {
			w.picture("trial")
		}
		w.do(trouble.cause)
		if trouble.end != nil {
			w.do(chromedp.Sleep(100*time.Millisecond), trouble.end)
		}
		w.see("page-interrupted")
		records := w.stored(number + 1)
		if got := records[number].Interrupted; got != trouble.interrupted {
			t.Errorf("%s: the trial says %q, not %q", trouble.name, got, trouble.interrupted)
		}
		if records[number].Response != "" || records[number].Correct != -1 {
			t.Errorf("%s: the trial has a response", trouble.name)
		}
		w.goOn()
	}

	// A clock that is set during a trial changes nothing, and is told.
	number := len(troubles)
	w.untilRunning(number)
	w.do(script(`(() => { const now = Date.now; Date.now = () => now() - 3_600_000; })()`))
	w.trial(number)
	last := w.stored(number + 1)[number]
	if last.Interrupted != "" || last.Response == "" || last.ResponseMs < 2500 || last.ResponseMs > 20000 {
		t.Errorf("after the clock was set: %q, response %q after %g ms", last.Interrupted, last.Response, last.ResponseMs)
	}
	if last.InputDelayMs < 0.01 || last.InputDelayMs > 1000 {
		t.Errorf("the answer was handled %g ms after its event", last.InputDelayMs)
	}
	for range 200 {
		if _, records, _ := w.state(); hasEvent(records, "clock_set") {
			break
		}
		time.Sleep(20 * time.Millisecond)
	}
	_, all, stored := w.state()
	if !hasEvent(all, "clock_set") || !hasEvent(all, "zoomed") {
		t.Error("no record tells that the clock was set, or none that the pixel ratio changed")
	}
	cards := 0
	for i := range all {
		if all[i].Card != nil {
			cards++
		}
	}
	if cards != 2 {
		t.Errorf("the card was asked for %d times, not again after the change of pixel ratio", cards)
	}
	seed, err := strconv.ParseUint(stored.Seed, 16, 64)
	if err != nil {
		t.Fatal(err)
	}
	report := replay.Verify(l.spec, run.Assignment{Seed: seed, Group: stored.Group, Order: stored.Order}, all)
	if !report.OK() || report.Trials != number+1 {
		t.Errorf("replay: %+v", report)
	}
}

func script(text string) chromedp.Action { return chromedp.Evaluate(text+";0", nil) }

// untilRunning waits until the stimulus of a trial is shown.
func (w *walker) untilRunning(number int) {
	w.t.Helper()
	w.do(chromedp.Poll(fmt.Sprintf(`document.body.className === "trial" && document.querySelector("canvas")?.dataset.trial === "%d" && document.querySelector("canvas").dataset.phase === "running"`, number), nil, chromedp.WithPollingInterval(20*time.Millisecond)),
		chromedp.Sleep(500*time.Millisecond)) // the fixation is over
}

// stored waits until the server has n trials and gives them.
func (w *walker) stored(n int) []*run.TrialRecord {
	w.t.Helper()
	var list []*run.TrialRecord
	for range 500 {
		list = nil
		_, records, _ := w.state()
		for i := range records {
			if records[i].Trial != nil {
				list = append(list, records[i].Trial)
			}
		}
		if len(list) >= n {
			return list
		}
		time.Sleep(20 * time.Millisecond)
	}
	w.t.Fatalf("the server has %d trials, not %d", len(list), n)
	return nil
}

// goOn answers what stands between an interruption and the next trial.
func (w *walker) goOn() {
	w.t.Helper()
	for range 40 {
		where := w.where()
		switch where {
		case "page-card":
			w.card()
		case "page-distance":
			w.distance()
		case "page-interrupted", "page-check", "page-break", "page-instructions":
			w.click("continue")
		default:
			if strings.HasPrefix(where, "trial ") {
				return
			}
		}
		for range 20 { // until the page has changed, or stays: the check may be refused
			if w.where() != where {
				break
			}
			time.Sleep(50 * time.Millisecond)
		}
	}
	w.t.Fatalf("no trial comes: %s", w.where())
}

func hasEvent(records []run.Record, name string) bool {
	return slices.ContainsFunc(records, func(r run.Record) bool { return r.Event != nil && r.Event.Name == name })
}
