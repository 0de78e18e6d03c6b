package main

import (
	"bytes"
	"context"
	"fmt"
	"math"
	"net/http"
	"net/http/cookiejar"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/input"
	"github.com/chromedp/cdproto/page"
	"github.com/chromedp/chromedp"
	"github.com/google/uuid"

	"distal/experiments/exact"
	"distal/experiments/library"
	"distal/experiments/random"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/visual"
	"distal/server/export"
	"distal/server/postgres"
	"distal/server/quality"
	"distal/server/store"
)

// lab is a server with one lab and one launched study, for tests.
type lab struct {
	t     *testing.T
	app   *app
	id    uuid.UUID
	admin uuid.UUID
	study store.Study
	spec  *study.Study
	url   string
}

// startLab launches a study of the library, changed as a test needs it.
func startLab(t *testing.T, name string, changes ...func(*study.Study)) *lab {
	t.Helper()
	ctx, cancel := context.WithCancel(context.Background())
	t.Cleanup(cancel)
	_, serverURL := postgres.TestDatabase(t)
	s, err := store.Open(ctx, serverURL)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	conn := connection{Data: t.TempDir()}
	listener, err := listen(ctx, "localhost:0")
	if err != nil {
		t.Fatal(err)
	}
	a, err := conn.newApp(s, localOrigin(listener))
	if err != nil {
		t.Fatal(err)
	}
	served := make(chan struct{})
	go func() {
		defer close(served)
		if err := a.serve(ctx, listener); err != nil {
			t.Error(err)
		}
	}()
	t.Cleanup(func() { cancel(); <-served })
	secret, err := conn.secret()
	if err != nil {
		t.Fatal(err)
	}
	l := &lab{t: t, app: a, url: a.origin}
	if l.id, err = s.CreateLab(ctx, "Test lab", secret.Seal); err != nil {
		t.Fatal(err)
	}
	if l.admin, err = s.CreatePerson(ctx, l.id, uuid.Nil, store.Person{Name: "Ada Admin", Email: "ada@lab.example", Role: store.RoleAdmin}); err != nil {
		t.Fatal(err)
	}
	var problems study.Problems
	if l.spec, problems = library.Read(name); problems.Failed() {
		t.Fatal(problems)
	}
	for _, change := range changes {
		change(l.spec)
	}
	id, err := a.workspace.Launch(ctx, l.id, l.admin, l.spec)
	if err != nil {
		t.Fatal(err)
	}
	if l.study, err = s.FindStudy(ctx, l.id, id); err != nil {
		t.Fatal(err)
	}
	return l
}

// browser starts Chromium with software rendering.
func browser(t *testing.T, width, height int) context.Context {
	t.Helper()
	profile, err := os.MkdirTemp("", "distal-chromium-")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(profile) }) // the browser may still write for a moment: what is left is in the temporary folder
	options := append(chromedp.DefaultExecAllocatorOptions[:],
		chromedp.ExecPath("/usr/bin/chromium"), chromedp.NoSandbox, chromedp.WindowSize(width, height),
		chromedp.Flag("enable-unsafe-swiftshader", true), chromedp.Flag("use-angle", "swiftshader"),
		chromedp.Flag("disable-quic", true), chromedp.Flag("disable-background-networking", true),
		chromedp.Flag("disable-component-update", true), chromedp.Flag("disable-sync", true),
		chromedp.Flag("disable-background-timer-throttling", true), chromedp.Flag("disable-renderer-backgrounding", true),
		chromedp.UserDataDir(profile), chromedp.WSURLReadTimeout(time.Minute),
	)
	allocator, cancel := chromedp.NewExecAllocator(context.Background(), options...)
	t.Cleanup(cancel)
	ctx, cancel := chromedp.NewContext(allocator)
	t.Cleanup(cancel)
	// The browser lives as long as the context of the first call.
	if err := chromedp.Run(ctx); err != nil {
		t.Fatal(err)
	}
	return ctx
}

// participant drives the pages of a study as a person would: with key and
// pointer events. It answers by a Weibull function of a known threshold.
type participant struct {
	t         *testing.T
	ctx       context.Context
	lab       *lab
	threshold float64
	slope     float64
	draw      random.Stream
	pictures  string // folder for screenshots, "" for none
	closeAt   int    // trial before which the tab is closed once, 0: never
	trials    int
}

func (p *participant) do(actions ...chromedp.Action) {
	p.t.Helper()
	ctx, cancel := context.WithTimeout(p.ctx, 40*time.Second)
	defer cancel()
	if err := chromedp.Run(ctx, actions...); err != nil {
		p.t.Fatalf("%v\npage: %s", err, p.text())
	}
}

func (p *participant) text() string {
	ctx, cancel := context.WithTimeout(p.ctx, 5*time.Second)
	defer cancel()
	var text string
	_ = chromedp.Run(ctx, chromedp.Evaluate(`document.body.innerText.slice(0, 600)`, &text))
	return text
}

func id(name string) string { return `[data-testid="` + name + `"]` }

func (p *participant) click(name string) {
	p.t.Helper()
	p.do(chromedp.Click(id(name), chromedp.ByQuery))
}

func (p *participant) see(name string) {
	p.t.Helper()
	p.do(chromedp.WaitVisible(id(name), chromedp.ByQuery))
}

func (p *participant) number(expression string) float64 {
	p.t.Helper()
	var x float64
	p.do(chromedp.Evaluate(`Number(`+expression+`)`, &x))
	return x
}

// key presses a key by its code, without a printed character unless given.
func (p *participant) key(code, key string, shift bool) {
	p.t.Helper()
	modifiers := input.ModifierNone
	if shift {
		modifiers = input.ModifierShift
	}
	p.do(
		input.DispatchKeyEvent(input.KeyRawDown).WithCode(code).WithKey(key).WithModifiers(modifiers),
		input.DispatchKeyEvent(input.KeyUp).WithCode(code).WithKey(key).WithModifiers(modifiers),
	)
}

func (p *participant) picture(name string) {
	p.t.Helper()
	if p.pictures == "" {
		return
	}
	var png []byte
	p.do(chromedp.CaptureScreenshot(&png))
	if err := os.WriteFile(filepath.Join(p.pictures, name+".png"), png, 0o644); err != nil {
		p.t.Fatal(err)
	}
}

// consent reads, ticks every statement and agrees.
func (p *participant) consent() {
	p.t.Helper()
	p.see("page-consent")
	p.picture("consent")
	n := len(study.Statements(p.lab.spec.Texts[0].Consent))
	p.click("agree") // refused: not all is ticked
	for i := range n {
		p.click(fmt.Sprintf("statement-%d", i))
	}
	p.click("agree")
}

func (p *participant) screening() {
	p.t.Helper()
	p.see("page-screening")
	p.picture("cautions")
	p.click("cautions-read")
	p.do(chromedp.SendKeys(id("age"), "34", chromedp.ByQuery))
	p.click("screening-seizures-no")
	p.click("screening-sight-yes")
	p.click("continue")
}

// cardPxPerMm is what the participant's "card" measures: 96 px per inch.
const cardPxPerMm = 96 / 25.4

func (p *participant) card() {
	p.t.Helper()
	for range p.lab.spec.Screen.CardRepeats {
		p.see("card")
		want := math.Round(cardPxPerMm * visual.CardWidthMm)
		for {
			gap := want - p.number(`document.querySelector('[data-testid="card"]').dataset.width`)
			if math.Abs(gap) < 1 {
				break
			}
			code := "ArrowRight"
			if gap < 0 {
				code = "ArrowLeft"
			}
			p.key(code, code, math.Abs(gap) >= 10)
		}
		p.picture("card")
		var nth string
		p.do(chromedp.Text(`.sheet .small`, &nth, chromedp.ByQuery))
		p.key("Enter", "Enter", false)
		p.do(chromedp.Poll(`!document.querySelector('.sheet .small')?.innerText.includes(`+strconv.Quote(strings.SplitN(nth, ".", 2)[0])+`)`, nil, chromedp.WithPollingInterval(20*time.Millisecond)))
	}
}

// distance looks at the square with one eye at 570 mm.
func (p *participant) distance() {
	p.t.Helper()
	p.see("page-distance")
	p.picture("distance")
	if p.lab.spec.Screen.Distance == study.StatedDistance {
		p.click("continue")
		return
	}
	p.key("Space", " ", false)
	for n := range p.lab.spec.Screen.DistanceRepeats + 1 {
		p.see("page-distance-trial")
		want := visual.OffsetMm(visual.BlindSpotDeg, 570) * cardPxPerMm * (1 + 0.02*p.draw.Normal())
		p.do(chromedp.Poll(fmt.Sprintf(`Number(document.querySelector('[data-testid="blind-dot"]')?.dataset.offsetPx) > %f`, want), nil, chromedp.WithPollingInterval(10*time.Millisecond)))
		if n == 1 {
			p.picture("blind-spot")
		}
		p.key("Space", " ", false)
		if n == 0 {
			p.do(chromedp.Poll(`!document.querySelector('[data-testid="blind-mark"]') || !document.querySelector('h1').innerText.includes('far')`, nil))
			continue
		}
		var letter string
		p.do(chromedp.Poll(`document.querySelector('[data-testid="blind-mark"]')?.dataset.letter`, &letter, chromedp.WithPollingInterval(10*time.Millisecond)))
		p.see("page-distance-letter")
		p.click("letter-" + letter)
	}
}

func (p *participant) check() {
	p.t.Helper()
	// A busy machine may be refused: like a person, try again.
	for attempt := 0; ; attempt++ {
		p.see("page-check")
		p.click("continue")
		p.do(chromedp.Poll(`!!document.querySelector('`+id("page-instructions")+`') || !!document.querySelector('`+id("check-stop")+`')`, nil))
		if p.where() == "page-instructions" {
			break
		}
		if attempt == 20 {
			p.t.Fatalf("the display check does not pass: %s", p.text())
		}
	}
	p.picture("instructions")
	p.click("continue")
}

// state is the run as the server has it, in an engine of the test's own.
func (p *participant) state() (*run.Run, []run.Record, store.Run) {
	p.t.Helper()
	ctx := context.Background()
	runs, err := p.lab.app.store.FindRuns(ctx, p.lab.id, p.lab.study.ID)
	if err != nil || len(runs) == 0 {
		p.t.Fatalf("runs: %v", err)
	}
	records, err := p.lab.app.store.FindRecords(ctx, p.lab.id, runs[0].ID)
	if err != nil {
		p.t.Fatal(err)
	}
	seed, err := strconv.ParseUint(runs[0].Seed, 16, 64)
	if err != nil {
		p.t.Fatal(err)
	}
	r, err := run.New(p.lab.spec, run.Assignment{Seed: seed, Group: runs[0].Group, Order: runs[0].Order})
	if err != nil {
		p.t.Fatal(err)
	}
	for i := range records {
		if err := r.Apply(&records[i]); err != nil {
			p.t.Fatalf("record %d: %v", i+1, err)
		}
	}
	return r, records, runs[0]
}

// where is the page's state: its name, or trial and phase.
func (p *participant) where() string {
	var where string
	p.do(chromedp.Evaluate(`(() => {
		const canvas = document.querySelector("canvas");
		if (document.body.className === "trial" && canvas) return "trial " + canvas.dataset.trial + " " + canvas.dataset.phase;
		return document.querySelector("[data-testid^=page-]")?.dataset.testid ?? "";
	})()`, &where))
	return where
}

// measure answers trials and takes breaks until the questions come.
func (p *participant) measure() {
	p.t.Helper()
	last := -1
	deadline := time.Now().Add(12 * time.Minute)
	for time.Now().Before(deadline) {
		where := p.where()
		switch {
		case where == "page-questions" || where == "page-debrief" || where == "page-refused":
			return
		case where == "page-break" || where == "page-interrupted" || where == "page-resumed":
			if where == "page-break" && last < 0 {
				p.picture("break")
			}
			p.click("continue")
			p.do(chromedp.Poll(`!document.querySelector('`+id(where)+`')`, nil, chromedp.WithPollingInterval(20*time.Millisecond)))
		case strings.HasPrefix(where, "trial "):
			var number int
			var phase string
			fmt.Sscanf(where, "trial %d %s", &number, &phase)
			if phase != "answer" || number == last {
				break
			}
			if p.closeAt > 0 && number >= p.closeAt {
				p.closeAt = 0
				p.reopen()
				continue
			}
			last = number
			p.answer(number)
		}
		time.Sleep(15 * time.Millisecond)
	}
	p.t.Fatalf("the measurement does not end; page: %s", p.text())
}

// answer decides as an observer with the known threshold would and presses the key.
func (p *participant) answer(number int) {
	p.t.Helper()
	var plan *run.TrialPlan
	for range 200 { // until the server has the trial before
		r, _, _ := p.state()
		step := r.Next()
		if step.Kind == run.StepBreak { // the break's record is still on its way
			time.Sleep(20 * time.Millisecond)
			continue
		}
		if step.Kind == run.StepTrial && step.Trial.Number == number {
			plan = step.Trial
			break
		}
		time.Sleep(20 * time.Millisecond)
	}
	if plan == nil {
		p.t.Fatalf("the server does not know of trial %d", number)
	}
	level := plan.Level
	if math.IsNaN(level) {
		level = 1
	}
	f := -exact.Expm1(-exact.Pow(level/p.threshold, p.slope))
	choice := plan.CorrectChoice
	if p.draw.Float64() >= 0.5+(0.5-0.01)*f {
		choice = 1 - choice
	}
	p.trials++
	name := p.lab.spec.Tasks[plan.Task].Choices[choice].Name
	if p.trials%4 == 0 { // sometimes the button
		p.do(chromedp.ActionFunc(func(ctx context.Context) error {
			var box []float64
			if err := chromedp.Evaluate(`(() => { const b = document.querySelector('`+id("choice-"+name)+`').getBoundingClientRect(); return [b.x + b.width/2, b.y + b.height/2]; })()`, &box).Do(ctx); err != nil {
				return err
			}
			return chromedp.MouseClickXY(box[0], box[1]).Do(ctx)
		}))
		return
	}
	code := p.lab.spec.Tasks[plan.Task].Choices[choice].Keys[0]
	p.key(code, code, false)
}

// reopen closes the tab in the middle of a trial and comes back.
func (p *participant) reopen() {
	p.t.Helper()
	var address string
	p.do(chromedp.Location(&address))
	fresh, cancel := chromedp.NewContext(p.ctx)
	p.t.Cleanup(cancel)
	if err := chromedp.Run(fresh, chromedp.Navigate("about:blank")); err != nil {
		p.t.Fatal(err)
	}
	closing, end := context.WithTimeout(p.ctx, 10*time.Second)
	defer end()
	if err := chromedp.Run(closing, page.Close()); err != nil {
		p.t.Fatal(err)
	}
	p.ctx = fresh
	p.do(chromedp.Navigate(address))
	p.see("page-resumed")
	p.picture("resumed")
}

func (p *participant) finish() string {
	p.t.Helper()
	if p.where() == "page-questions" {
		p.picture("questions")
		p.click("question-effort-6")
		p.click("continue")
	}
	p.see("page-debrief")
	p.click("continue")
	p.see("page-done")
	p.picture("done")
	var code string
	p.do(chromedp.Text(id("code"), &code, chromedp.ByQuery))
	return code
}

// The whole way: a stranger with a known threshold takes the coherence study in
// a real browser at real speed, closing the tab once; the data are exported,
// every trial is re-created and the threshold's interval holds the known one.
func TestWholeWay(t *testing.T) {
	l := startLab(t, "motion-coherence", func(s *study.Study) { s.Procedures[0].MaxTrials = 50 })
	// One interval in twenty does not hold the true value: which this is must not
	// change from day to day. A drill counts them.
	l.app.people.Seed = "0123456789abcdef"
	p := &participant{
		t: t, ctx: browser(t, 1280, 800), lab: l, threshold: 0.25, slope: 2.5, closeAt: 40,
		draw: random.New(20261103, 0, random.PurposeObserver), pictures: os.Getenv("DISTAL_TEST_PICTURES"),
	}
	p.do(emulation.SetDeviceMetricsOverride(1280, 800, 1, false), chromedp.Navigate(l.url+"/s/"+l.study.Link))
	p.consent()
	p.screening()
	p.card()
	p.distance()
	p.check()
	p.measure()
	code := p.finish()

	_, records, stored := p.state()
	if stored.Outcome != store.OutcomeCompleted || code == "" || code != stored.CompletionCode {
		t.Errorf("outcome %q, code %q, stored %q", stored.Outcome, code, stored.CompletionCode)
	}
	checkRecords(t, records)
	checkFrames(t, records)
	for _, th := range quality.Thresholds(l.spec, records) {
		t.Logf("threshold %.3f [%.3f, %.3f], known %.3f: %s", th.Threshold, th.Low, th.High, p.threshold, th.Explanation)
		if !th.Known || th.Low > p.threshold || th.High < p.threshold {
			t.Errorf("the interval does not hold the known threshold %.3f", p.threshold)
		}
	}

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
	replayed := again.Replay(func(int, int) {})
	t.Logf("replay: %d of %d trials agree", replayed.Agree, replayed.Trials)
	if !replayed.OK() || replayed.Trials < 40 {
		t.Errorf("replay: %+v", replayed)
	}

	// Somebody who comes again is told so.
	p.do(chromedp.Evaluate(`indexedDB.deleteDatabase("distal")`, nil), chromedp.Navigate(l.url+"/s/"+l.study.Link))
	p.see("page-taken")
}

// checkRecords: consent first, sequences without gap, no trial twice.
func checkRecords(t *testing.T, records []run.Record) {
	t.Helper()
	trials := map[int]bool{}
	resumed := false
	for i := range records {
		r := &records[i]
		if r.Sequence != i+1 {
			t.Fatalf("record %d has sequence %d", i+1, r.Sequence)
		}
		if i == 0 && r.Kind != run.KindConsent {
			t.Error("the first record is not consent")
		}
		if r.Kind == run.KindEvent && r.Event.Name == "resumed" {
			resumed = true
		}
		if r.Kind == run.KindTrial {
			if trials[r.Trial.Trial] {
				t.Errorf("trial %d is stored twice", r.Trial.Trial)
			}
			trials[r.Trial.Trial] = true
		}
	}
	if !resumed {
		t.Error("the closed tab left no trace")
	}
	if len(trials) < 40 {
		t.Errorf("only %d trials", len(trials))
	}
}

// checkFrames: every frame that was late is in the record, and the steps add up.
func checkFrames(t *testing.T, records []run.Record) {
	t.Helper()
	shown, late := 0, 0
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Interrupted != "" {
			continue
		}
		total := 0
		for j, n := range r.Steps {
			total += n
			shown++
			if n > 1 {
				late++
			}
			if got := visual.Steps(r.IntervalsMs[j], r.RefreshMs); got != n {
				t.Errorf("trial %d, frame %d: %d steps recorded for %.2f ms", r.Trial, j, n, r.IntervalsMs[j])
			}
		}
		if total < r.StimulusSteps {
			t.Errorf("trial %d: %d refreshes shown, %d planned", r.Trial, total, r.StimulusSteps)
		}
	}
	t.Logf("%d of %d stimulus frames on time (%.2f %%)", shown-late, shown, 100*float64(shown-late)/float64(max(1, shown)))
}

// client is an HTTP client with cookies that does not follow redirects.
func client(t *testing.T) *http.Client {
	t.Helper()
	jar, err := cookiejar.New(nil)
	if err != nil {
		t.Fatal(err)
	}
	return &http.Client{Jar: jar, CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse }}
}
