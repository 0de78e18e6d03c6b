package main

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"net/http"
	"net/http/httptest"
	"os"
	"strconv"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/network"
	"github.com/chromedp/cdproto/page"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
	"github.com/jackc/pgx/v5"

	"distal/experiments/random"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/store"
	"distal/web"
)

// hurdle stands between browser and server and can be put up by a test.
type hurdle struct {
	server   http.Handler
	offline  atomic.Bool           // calls get no answer
	altering atomic.Pointer[alter] // what arrives is not what was sent
}

// alter replaces one text in the answers of one address.
type alter struct{ path, old, new string }

func (h *hurdle) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	if h.offline.Load() && strings.HasPrefix(r.URL.Path, "/api/") {
		panic(http.ErrAbortHandler) // the connection breaks
	}
	a := h.altering.Load()
	if a == nil || r.URL.Path != a.path {
		h.server.ServeHTTP(w, r)
		return
	}
	r.Header.Set("Accept-Encoding", "identity")
	answer := httptest.NewRecorder()
	h.server.ServeHTTP(answer, r)
	body := bytes.Replace(answer.Body.Bytes(), []byte(a.old), []byte(a.new), 1)
	for name, values := range answer.Header() {
		w.Header()[name] = values
	}
	w.Header().Set("Content-Length", strconv.Itoa(len(body)))
	w.Header().Set("Cache-Control", "no-store")
	w.WriteHeader(answer.Code)
	_, _ = w.Write(body)
}

// withEveryPage gives a study every kind of page and few trials.
func withEveryPage(s *study.Study) {
	s.About.Name = "short-walk"
	s.Screen.MaxJitterMs, s.Screen.MaxDroppedPercent, s.Screen.MinRefreshHz = 50, 100, 20 // the machine is busy with other tests
	s.Screen.DistanceRepeats, s.Screen.CardRepeats = 3, 3
	s.Tasks[0].ResponseWindowMs = 0
	s.Blocks[0].Practice = study.Criterion{Correct: 1, Window: 1, MaxTrials: 1, Otherwise: study.GoOn}
	s.Blocks[1].Catch, s.Blocks[1].BreakEvery = study.Catch{}, 3
	s.Procedures[0].MaxTrials = 6
	both := func(en, de string) []study.LocalText {
		return []study.LocalText{{Language: "en", Text: en}, {Language: "de", Text: de}}
	}
	s.Questions = append(s.Questions,
		study.Question{Name: "screen-age", Type: study.NumberQuestion, Ask: both("How old is your screen?", "Wie alt ist Ihr Bildschirm?"), Min: 0, Max: 40, Unit: "years"},
		study.Question{Name: "hand", Type: study.ChoiceQuestion, Ask: both("Which hand answered?", "Mit welcher Hand haben Sie geantwortet?"),
			Options: []study.Option{{Name: "left", Label: both("the left hand", "mit der linken")}, {Name: "right", Label: both("the right hand", "mit der rechten")}}})
}

// startPages starts a lab whose study has every kind of page and few trials,
// and is changed further before its launch.
func startPages(t *testing.T, changes ...func(*study.Study)) (*lab, *hurdle, string) {
	t.Helper()
	l := startLab(t, "motion-coherence", append([]func(*study.Study){withEveryPage}, changes...)...)
	h := &hurdle{server: l.app.echo}
	server := httptest.NewServer(h)
	t.Cleanup(server.Close)
	return l, h, server.URL + "/s/" + l.study.Link
}

// walker is a participant who looks at every page closely.
type walker struct {
	*participant
	axe string // the accessibility checker's script
}

func newWalker(t *testing.T, l *lab, address string) *walker {
	t.Helper()
	script, err := os.ReadFile("../web/node_modules/axe-core/axe.min.js")
	if err != nil {
		t.Fatalf("%v (run `npm ci` in web)", err)
	}
	w := &walker{axe: string(script), participant: &participant{
		t: t, ctx: browser(t, 1280, 800), lab: l, draw: random.New(7, 0, random.PurposeObserver), pictures: os.Getenv("DISTAL_TEST_PICTURES"),
	}}
	w.wide()
	w.do(chromedp.Navigate(address))
	return w
}

func (w *walker) wide() { w.do(emulation.SetDeviceMetricsOverride(1280, 800, 1, false)) }

// look waits for a page and inspects it: accessibility by axe-core, one main
// heading that has the focus or hands it on, and no sideways scrolling at 360 px.
func (w *walker) look(name string) {
	w.t.Helper()
	w.see("page-" + name)
	w.inspect(name)
}

func (w *walker) inspect(name string) {
	w.t.Helper()
	for _, problem := range w.problems() {
		w.t.Errorf("page %s: %s", name, problem)
	}
	w.picture("page-" + name)
	w.do(emulation.SetDeviceMetricsOverride(360, 740, 1, false), chromedp.Sleep(60*time.Millisecond))
	if over := w.number(`document.documentElement.scrollWidth - innerWidth`); over > 0 {
		w.t.Errorf("page %s: %g px wider than a window of 360 px", name, over)
	}
	w.picture("page-" + name + "-narrow")
	w.wide()
}

// problems are what axe-core has to say about the page (WCAG 2.2 A and AA, and good practice).
func (w *walker) problems() []string {
	w.t.Helper()
	var loaded bool
	w.do(chromedp.Evaluate(`typeof axe !== "undefined"`, &loaded))
	if !loaded {
		w.do(chromedp.Evaluate(w.axe, nil))
	}
	var problems []string
	await := func(p *runtime.EvaluateParams) *runtime.EvaluateParams { return p.WithAwaitPromise(true) }
	w.do(chromedp.Evaluate(`axe.run(document, {resultTypes: ["violations"], runOnly: ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]})
		.then((r) => r.violations.map((v) => v.id + ": " + v.help + " — " + v.nodes.map((n) => n.html).join(" ")))`, &problems, await))
	return problems
}

func (w *walker) says(name, text string) {
	w.t.Helper()
	w.do(chromedp.Poll(fmt.Sprintf(`document.querySelector(%q)?.innerText.includes(%q)`, name, text), nil, chromedp.WithPollingInterval(20*time.Millisecond)))
}

func (w *walker) press(code, key string) {
	w.t.Helper()
	w.key(code, key, false)
}

// drag moves the corner of the card's outline so that it is px wide.
func (w *walker) drag(px float64) {
	w.t.Helper()
	x, y := w.number(`(() => { const b = document.querySelector('`+id("card-handle")+`').getBoundingClientRect(); return b.x + b.width/2; })()`),
		w.number(`(() => { const b = document.querySelector('`+id("card-handle")+`').getBoundingClientRect(); return b.y + b.height/2; })()`)
	width := w.number(`document.querySelector('` + id("card") + `').dataset.width`)
	w.do(
		chromedp.MouseEvent("mousePressed", x, y, chromedp.ButtonLeft, chromedp.ClickCount(1)),
		chromedp.MouseEvent("mouseMoved", x+20, y, chromedp.ButtonLeft),
		chromedp.MouseEvent("mouseMoved", x+px-width, y, chromedp.ButtonLeft),
		chromedp.MouseEvent("mouseReleased", x+px-width, y, chromedp.ButtonLeft, chromedp.ClickCount(1)),
	)
	if got := w.number(`document.querySelector('` + id("card") + `').dataset.width`); got != px {
		w.t.Errorf("the outline is %g px wide after it was drawn to %g px", got, px)
	}
}

// trial waits until trial number asks for an answer and says left.
func (w *walker) trial(number int) {
	w.t.Helper()
	w.do(chromedp.Poll(fmt.Sprintf(`document.querySelector("canvas")?.dataset.trial === "%d" && document.querySelector("canvas").dataset.phase === "answer"`, number), nil, chromedp.WithPollingInterval(20*time.Millisecond)))
	w.press("ArrowLeft", "ArrowLeft")
}

// Every page of the whole way, with everything that can be done wrong on it,
// inspected at two widths.
func TestPages(t *testing.T) {
	l, h, address := startPages(t)
	w := newWalker(t, l, address)

	w.look("consent")
	w.click("language-de")
	w.says("h2", "")
	w.look("consent")
	w.click("language-en")
	w.click("agree")
	w.says(".notice", "tick every sentence")
	w.consent()

	w.look("screening")
	w.click("continue")
	w.says(".notice", "read the cautions")
	w.screening()

	w.look("card")
	want := 323.0 // 85.6 mm at 96 px per inch
	for i, px := range []float64{want, want, want * 1.2, want, want, want} {
		if i == 3 {
			w.says(".notice", "differ by more")
			w.inspect("card-again")
		}
		w.see("card")
		w.says(".sheet .small", fmt.Sprintf("Setting %d", i%3+1))
		w.drag(float64(int(px)))
		switch i % 3 { // three ways on
		case 0:
			w.click("continue")
		case 1:
			w.press("Enter", "Enter")
		case 2:
			w.do(chromedp.Focus(id("continue"), chromedp.ByQuery))
			w.do(chromedp.KeyEvent(" "))
		}
	}

	w.look("distance")
	w.distance()

	w.look("check")
	w.click("continue")
	w.look("instructions")
	w.says(`[data-testid="keys"]`, "←")
	w.click("continue")
	w.look("break")
	w.click("continue")

	w.practise()
	w.measureWithTrouble(h)
	w.askAndEnd()

	w.do(chromedp.Evaluate(`indexedDB.deleteDatabase("distal")`, nil), chromedp.Navigate(address))
	w.look("taken")
}

// Pages that are the end of the way: for people who cannot take part, who do
// not want to, who leave, and for a study that is not what was signed.
func TestEndPages(t *testing.T) {
	l, h, address := startPages(t)
	w := newWalker(t, l, address)
	w.others(address)
	w.altered(h, address)
}

// practise: Escape stops the first display, the second gets feedback.
func (w *walker) practise() {
	w.do(chromedp.Poll(`document.querySelector("canvas")?.dataset.phase === "running"`, nil), chromedp.Sleep(150*time.Millisecond))
	w.press("Escape", "Escape")
	w.look("interrupted")
	w.says(".sheet", "If you feel strange")
	w.click("continue")
	w.trial(1) // the same trial again, with fresh dots
	w.see("verdict")
	w.picture("page-verdict")
}

// measureWithTrouble loses the network, reloads the page and zooms.
func (w *walker) measureWithTrouble(h *hurdle) {
	w.look("break")
	w.click("continue")
	w.trial(2)
	h.offline.Store(true)
	w.trial(3)
	w.trial(4)
	w.look("break") // three trials are done
	w.says(`[data-testid="state"]`, "No connection")
	w.inspect("offline")
	w.click("withdraw")
	w.see("confirm-yes")
	w.inspect("withdraw-dialog")
	w.click("confirm-yes")
	w.says(`[data-testid="withdraw-failed"]`, "nothing was deleted")
	w.inspect("withdraw-failed")
	h.offline.Store(false)
	w.do(chromedp.Poll(`document.querySelector('[data-testid="state"]').innerText === ""`, nil))

	w.do(chromedp.Reload())
	w.look("resumed")
	w.click("continue")
	w.see("page-break")
	// Another zoom: the card is asked for again, then distance and display.
	w.do(emulation.SetDeviceMetricsOverride(1024, 640, 1.25, false))
	w.click("continue")
	w.see("page-card")
	w.wide()
	for range 2 { // the ratio changes again at once: what was set in between does not count
		for range w.lab.spec.Screen.CardRepeats {
			w.see("card")
			w.drag(323)
			w.click("continue")
			w.do(chromedp.Sleep(100 * time.Millisecond))
		}
		if w.where() != "page-card" {
			break
		}
	}
	w.distance()
	w.see("page-check")
	w.click("continue")
	for number := 5; number < 8; number++ {
		w.trial(number)
	}
}

func (w *walker) askAndEnd() {
	w.look("questions")
	w.click("continue")
	w.says(".notice", "not marked as optional")
	w.click("question-effort-6")
	w.click("question-hand-left")
	w.do(chromedp.SendKeys(id("question-screen-age"), "77", chromedp.ByQuery))
	w.click("continue")
	w.says(".notice", "from 0 to 40")
	w.do(chromedp.SetValue(id("question-screen-age"), "3", chromedp.ByQuery))
	w.click("continue")
	w.look("debrief")
	w.click("continue")
	w.look("done")
	var code string
	w.do(chromedp.Text(id("code"), &code, chromedp.ByQuery))
	_, records, stored := w.state()
	if stored.Outcome != store.OutcomeCompleted || code != stored.CompletionCode || code == "" {
		w.t.Errorf("outcome %q, code %q, stored %q", stored.Outcome, code, stored.CompletionCode)
	}
	w.do(chromedp.Reload())
	w.says(`[data-testid="code"]`, code) // still there after loading the page again
	kinds := map[string]int{}
	for i := range records {
		name := run.KindNames[records[i].Kind]
		if e := records[i].Event; e != nil {
			name = e.Name
		}
		kinds[name]++
	}
	if kinds["zoomed"] == 0 || kinds["resumed"] != 1 || kinds["card"] < 2 || kinds["trial"] != 8 {
		w.t.Errorf("records: %v", kinds)
	}
}

// others come to a study that they cannot take, or leave it.
func (w *walker) others(address string) {
	l := w.lab
	ctx := context.Background()
	again := func() {
		w.t.Helper()
		w.do(network.ClearBrowserCookies(), chromedp.Navigate("about:blank"), chromedp.Navigate(address))
	}
	for _, state := range []string{store.StatePaused, store.StateClosed, store.StateOpen} {
		if err := l.app.store.SetStudyState(ctx, l.id, l.admin, l.study.ID, state); err != nil {
			w.t.Fatal(err)
		}
		again()
		if state != store.StateOpen {
			w.look(state)
		}
	}
	w.see("page-consent")
	w.click("decline")
	w.look("declined")

	w.do(emulation.SetDeviceMetricsOverride(390, 844, 3, true), emulation.SetTouchEmulationEnabled(true))
	again()
	w.see("page-unfit")
	w.picture("page-unfit-phone")
	w.do(emulation.SetTouchEmulationEnabled(false))
	w.wide()

	var hiding page.ScriptIdentifier
	w.do(chromedp.ActionFunc(func(ctx context.Context) (err error) {
		hiding, err = page.AddScriptToEvaluateOnNewDocument(`HTMLCanvasElement.prototype.getContext = () => null;`).Do(ctx)
		return err
	}))
	again()
	w.look("unfit")
	w.says(".sheet", "WebGL2 is missing")
	w.do(chromedp.ActionFunc(func(ctx context.Context) error {
		return page.RemoveScriptToEvaluateOnNewDocument(hiding).Do(ctx)
	}))

	again()
	w.consent()
	w.see("page-screening")
	second, cancel := chromedp.NewContext(w.ctx)
	defer cancel()
	if err := chromedp.Run(second); err != nil { // the tab lives as long as the context of the first call
		w.t.Fatal(err)
	}
	other := &walker{axe: w.axe, participant: &participant{t: w.t, ctx: second, lab: l, pictures: w.pictures}}
	other.wide()
	other.do(chromedp.Navigate(address))
	other.look("other-tab")
	w.do(page.BringToFront())

	w.click("withdraw")
	w.click("confirm-no")
	w.click("withdraw")
	w.click("confirm-yes")
	w.look("withdrawn")
	var left int
	if err := l.app.store.InLab(ctx, l.id, countRecords(ctx, l, &left)); err != nil {
		w.t.Fatal(err)
	}
	if left != 0 {
		w.t.Errorf("%d records are left after the withdrawal", left)
	}

	again()
	w.consent()
	w.see("page-screening")
	w.click("cautions-read")
	w.do(chromedp.SendKeys(id("age"), "12", chromedp.ByQuery))
	w.click("screening-seizures-no")
	w.click("screening-sight-yes")
	w.click("continue")
	w.look("refused")
}

// altered changes a byte of everything that a run loads, one after another.
func (w *walker) altered(h *hurdle, address string) {
	assets, err := web.Assets()
	if err != nil {
		w.t.Fatal(err)
	}
	open := func(a *alter) {
		w.t.Helper()
		h.altering.Store(a)
		w.do(chromedp.Evaluate(`indexedDB.deleteDatabase("distal")`, nil), network.ClearBrowserCookies(), network.ClearBrowserCache(),
			chromedp.Navigate("about:blank"), chromedp.Navigate(address))
	}
	runs := func() int {
		w.t.Helper()
		list, err := w.lab.app.store.FindRuns(context.Background(), w.lab.id, w.lab.study.ID)
		if err != nil {
			w.t.Fatal(err)
		}
		return len(list)
	}
	bundle := "/api/bundles/" + w.lab.study.Bundle
	open(&alter{bundle, "Which way", "Which Way"})
	w.look("not-verified")
	open(&alter{bundle, `"signature":"ey`, `"signature":"ez`})
	w.see("page-not-verified")
	open(&alter{"/assets/" + assets["engine"].Digest, "asm", "asn"})
	before := runs()
	w.consent()
	w.see("page-not-verified")
	if after := runs(); after != before {
		w.t.Errorf("%d runs were begun with an engine that is not the signed one", after-before)
	}
	// Without the signed script nothing runs; the style sheet alone tells, after a while.
	open(&alter{"/assets/" + assets["participant_js"].Digest, "consent", "consemt"})
	w.do(chromedp.Poll(`getComputedStyle(document.querySelector(".waiting")).visibility === "visible"`, nil))
	w.inspect("no-script")
	open(&alter{"/assets/" + assets["participant_css"].Digest, "grey", "gray"})
	w.see("page-not-verified")
	h.altering.Store(nil)
}

// countRecords counts what is kept of the runs of l's study that were withdrawn.
func countRecords(ctx context.Context, l *lab, n *int) func(pgx.Tx) error {
	return func(tx pgx.Tx) error {
		return tx.QueryRow(ctx, `SELECT count(*) FROM records r JOIN runs USING (lab_id, run_id) WHERE study_id = $1 AND outcome = 'withdrawn'`, l.study.ID).Scan(n)
	}
}

// What a participant's browser loads before the consent page is usable, and in all.
func TestDownloadSize(t *testing.T) {
	l, _, address := startPages(t)
	origin := strings.TrimSuffix(address, "/s/"+l.study.Link)
	assets, err := web.Assets()
	if err != nil {
		t.Fatal(err)
	}
	load := func(address string) int {
		t.Helper()
		request, err := http.NewRequestWithContext(context.Background(), http.MethodGet, address, nil)
		if err != nil {
			t.Fatal(err)
		}
		request.Header.Set("Accept-Encoding", "gzip, br")
		answer, err := client(t).Do(request)
		if err != nil {
			t.Fatal(err)
		}
		defer answer.Body.Close()
		n, err := io.Copy(io.Discard, answer.Body)
		if err != nil || answer.StatusCode != http.StatusOK {
			t.Fatalf("%s: status %d, %v", address, answer.StatusCode, err)
		}
		t.Logf("%7d bytes  %s", n, strings.TrimPrefix(address, origin))
		return int(n)
	}
	first := load(address) + load(origin+"/api/keys") + load(origin+"/api/bundles/"+l.study.Bundle) +
		load(origin+"/assets/"+assets["participant_js"].Digest) + load(origin+"/assets/"+assets["participant_css"].Digest)
	all := first + load(origin+"/assets/"+assets["engine"].Digest)
	t.Logf("%d bytes before the consent page is usable, %d in all", first, all)
	if first > 60*1024 {
		t.Errorf("%d bytes before the consent page is usable: at most 60 KB are wanted", first)
	}
	if all > 600*1024 {
		t.Errorf("%d bytes in all: at most 600 KB are wanted", all)
	}
}
