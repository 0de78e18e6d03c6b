package main

import (
	"context"
	"encoding/json"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/runtime"
	"github.com/chromedp/chromedp"
	"github.com/google/uuid"

	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/server/store"
)

// addSimulated stores one simulated run and judges it.
func (l *lab) addSimulated(t *testing.T, seed uint64, dropRate float64) uuid.UUID {
	t.Helper()
	ctx := context.Background()
	st, err := l.app.store.FindStudy(ctx, l.id, l.study.ID)
	if err != nil {
		t.Fatal(err)
	}
	a := run.Assignment{Seed: seed, Order: st.Simulated}
	o := rehearsal.Observer{Threshold: 0.2, Slope: 2, Lapse: 0.01}
	screen := rehearsal.DefaultScreen()
	screen.DropRate = dropRate
	records, err := rehearsal.Observe(l.spec, a, o, screen, st.Bundle, float64(time.Now().UnixMilli()))
	if err != nil {
		t.Fatal(err)
	}
	n := store.NewRun{Study: st.ID, CreationKey: uuid.NewString(), Simulated: true, Seed: seedText(seed), Browser: "simulated"}
	r, err := l.app.store.CreateRun(ctx, l.id, n, l.spec, records[0])
	if err != nil {
		t.Fatal(err)
	}
	if _, err := l.app.store.Append(ctx, l.id, r.ID, records[1:]); err != nil {
		t.Fatal(err)
	}
	if err := l.app.workspace.Judge(ctx, l.id, r.ID); err != nil {
		t.Fatal(err)
	}
	return r.ID
}

func seedText(seed uint64) string {
	const hex = "0123456789abcdef"
	b := make([]byte, 16)
	for i := range b {
		b[i] = hex[seed>>(60-4*i)&15]
	}
	return string(b)
}

// The workspace in a browser: signing in by link, a study page that renews
// itself when a run arrives, a run page, an exclusion by hand with its reason,
// and no accessibility violation that axe-core finds, light and dark, wide and narrow.
func TestWorkspaceInBrowser(t *testing.T) {
	l := startLab(t, "motion-coherence")
	slow := l.addSimulated(t, 11, 0.09) // more dropped frames than the rules allow
	var good uuid.UUID
	for seed := uint64(12); seed < 16; seed++ {
		good = l.addSimulated(t, seed, 0.002)
	}
	p := &participant{t: t, ctx: browser(t, 1280, 900), lab: l, pictures: os.Getenv("DISTAL_TEST_PICTURES")}
	link, err := l.app.signInLink(context.Background(), l.id, l.admin)
	if err != nil {
		t.Fatal(err)
	}
	p.do(emulation.SetDeviceMetricsOverride(1280, 900, 1, false), chromedp.Navigate(link))
	p.click("sign-in")
	p.see("study-motion-coherence")
	p.accessible(t, "studies")

	p.do(chromedp.Navigate(l.url + "/studies/" + l.study.ID.String()))
	p.see("runs")
	before := p.number(`document.querySelectorAll('[data-testid="runs"] tbody tr').length`)
	time.Sleep(300 * time.Millisecond) // the stream of events is open
	l.addSimulated(t, 40, 0.002)
	p.do(chromedp.Poll(`document.querySelectorAll('[data-testid="runs"] tbody tr').length > `+jsonText(before), nil, chromedp.WithPollingTimeout(20*time.Second)))
	p.accessible(t, "study")

	p.do(chromedp.Navigate(l.url + "/runs/" + slow.String()))
	var decisions string
	p.do(chromedp.Text(id("decisions"), &decisions, chromedp.ByQuery))
	t.Logf("the rules say: %s", decisions)
	p.do(chromedp.Navigate(l.url + "/runs/" + good.String()))
	p.accessible(t, "run")
	if n := p.number(`document.querySelectorAll('.plot .standing').length`); n < 40 {
		t.Errorf("%v of the procedure's estimates are drawn", n)
	}
	p.see("standing")
	p.do(chromedp.SendKeys(id("reason"), "the dog walked over the keyboard", chromedp.ByQuery))
	p.click("exclude")
	p.see("decisions")
	r, err := l.app.store.FindRun(context.Background(), l.id, good)
	if err != nil || !r.Excluded {
		t.Errorf("excluded %v, %v", r.Excluded, err)
	}
	for _, path := range []string{"/library", "/people", "/ledger"} {
		p.do(chromedp.Navigate(l.url + path))
		p.accessible(t, path[1:])
	}
	p.do(emulation.SetDeviceMetricsOverride(390, 844, 1, false),
		emulation.SetEmulatedMedia().WithFeatures([]*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: "dark"}}),
		chromedp.Navigate(l.url+"/studies/"+l.study.ID.String()))
	p.accessible(t, "study-narrow-dark")
	if wide := p.number(`document.documentElement.scrollWidth - innerWidth`); wide > 0 {
		t.Errorf("the narrow page is %v px too wide", wide)
	}
	if bad, err := l.app.store.VerifyLedger(context.Background(), l.id); err != nil || bad != 0 {
		t.Errorf("ledger: entry %d does not fit, %v", bad, err)
	}
}

func jsonText(v any) string {
	text, _ := json.Marshal(v)
	return string(text)
}

// accessible takes a picture and runs axe-core over the page.
func (p *participant) accessible(t *testing.T, name string) {
	t.Helper()
	p.picture(name)
	script, err := os.ReadFile(filepath.Join("..", "web", "node_modules", "axe-core", "axe.min.js"))
	if err != nil {
		t.Fatal(err)
	}
	var found []struct {
		ID    string   `json:"id"`
		Help  string   `json:"help"`
		Nodes []string `json:"nodes"`
	}
	p.do(chromedp.Evaluate(string(script)+`;0`, nil),
		chromedp.Evaluate(`axe.run(document, {resultTypes: ["violations"]}).then(r => r.violations.map(v => ({id: v.id, help: v.help, nodes: v.nodes.map(n => n.html.slice(0, 120))})))`, &found, chromedp.EvalAsValue, awaitPromise))
	for _, v := range found {
		t.Errorf("%s: %s: %s: %v", name, v.ID, v.Help, v.Nodes)
	}
}

func awaitPromise(p *runtime.EvaluateParams) *runtime.EvaluateParams { return p.WithAwaitPromise(true) }
