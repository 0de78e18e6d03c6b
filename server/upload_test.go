package main

import (
	"bytes"
	"context"
	"encoding/base64"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/cdproto/fetch"
	"github.com/chromedp/chromedp"
	"github.com/google/uuid"

	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/value"
	"distal/server/access"
)

// device is a participant's browser without a page: it sends what a rehearsed run gives.
type device struct {
	t       *testing.T
	lab     *lab
	client  *http.Client
	token   string
	records []run.Record
}

// newDevice begins a run over HTTP, as the page does.
func newDevice(t *testing.T, l *lab, seed uint64) *device {
	t.Helper()
	d := &device{t: t, lab: l, client: client(t)}
	consent := d.rehearse(seed, 0)[0]
	body, err := value.Canonical(consent.Encode())
	if err != nil {
		t.Fatal(err)
	}
	status, answer := d.send(http.MethodPost, "/api/runs", fmt.Sprintf(`{"link":%q,"invitation":null,"language":"en","consent":%s}`, l.study.Link, body), map[string]string{"Idempotency-Key": uuid.NewString()})
	if status != http.StatusCreated {
		t.Fatalf("new run: status %d, %v", status, answer)
	}
	d.token = answer["token"].(string)
	seedGiven := uint64(0)
	fmt.Sscanf(answer["seed"].(string), "%x", &seedGiven)
	d.records = d.rehearse(seedGiven, int(answer["order"].(float64)))
	return d
}

func (d *device) rehearse(seed uint64, order int) []run.Record {
	d.t.Helper()
	records, err := rehearsal.Observe(d.lab.spec, run.Assignment{Seed: seed, Order: order}, rehearsal.Observer{Threshold: 0.2, Slope: 2}, rehearsal.DefaultScreen(), d.lab.study.Bundle, 1.79e12)
	if err != nil {
		d.t.Fatal(err)
	}
	return records
}

func (d *device) send(method, path, body string, header map[string]string) (int, map[string]any) {
	d.t.Helper()
	r, err := http.NewRequest(method, d.lab.url+path, strings.NewReader(body))
	if err != nil {
		d.t.Fatal(err)
	}
	r.Header.Set("Content-Type", "application/json")
	if d.token != "" {
		r.Header.Set("Authorization", "Bearer "+d.token)
	}
	for name, v := range header {
		r.Header.Set(name, v)
	}
	response, err := d.client.Do(r)
	if err != nil {
		d.t.Fatal(err)
	}
	defer response.Body.Close()
	text, err := io.ReadAll(response.Body)
	if err != nil {
		d.t.Fatal(err)
	}
	if strings.Contains(string(text), "goroutine ") || strings.Contains(string(text), ".go:") {
		d.t.Errorf("%s %s shows inner workings: %s", method, path, text)
	}
	var answer map[string]any
	if err := json.Unmarshal(text, &answer); err != nil {
		d.t.Fatalf("%s %s: status %d, not JSON: %s", method, path, response.StatusCode, text)
	}
	return response.StatusCode, answer
}

func upload(t *testing.T, records ...run.Record) string {
	t.Helper()
	var parts []string
	for i := range records {
		body, err := value.Canonical(records[i].Encode())
		if err != nil {
			t.Fatal(err)
		}
		parts = append(parts, string(body))
	}
	return `{"records":[` + strings.Join(parts, ",") + `]}`
}

// Uploads that are duplicate, out of order, truncated, oversized, forged or for
// another run: each gets its answer, and afterwards the run goes on and replays.
func TestUploads(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	d := newDevice(t, l, 5)
	other := newDevice(t, l, 6)
	const path = "/api/run/records"
	forged := d.token[:len(d.token)-8] + "AAAAAAAA"
	session, _, err := l.app.tokens.Issue(context.Background(), access.AudienceSession, l.id, uuid.Nil, l.admin)
	if err != nil {
		t.Fatal(err)
	}
	changed := d.records[1]
	screening := *changed.Screening
	screening.AgeYears = 77
	changed.Screening = &screening
	foreign := other.records[1]
	foreign.Bundle = strings.Repeat("0", 64)

	steps := []struct {
		name   string
		body   string
		header map[string]string
		status int
		acked  float64 // 0: an error
	}{
		{"AfterAGap", upload(t, d.records[3]), nil, 200, 1},
		{"First", upload(t, d.records[1]), nil, 200, 2},
		{"Duplicate", upload(t, d.records[1]), nil, 200, 2},
		{"DuplicateConsent", upload(t, d.records[0], d.records[1]), nil, 200, 2},
		{"OtherContent", upload(t, changed), nil, 409, 0},
		{"Reordered", upload(t, d.records[3], d.records[2]), nil, 200, 4},
		{"TrialTooEarly", upload(t, skipTo(d.records, 5, run.KindTrial)), nil, 409, 0},
		{"Truncated", upload(t, d.records[4])[:60], nil, 400, 0},
		{"NotJSON", "hello", nil, 400, 0},
		{"UnknownKey", strings.Replace(upload(t, d.records[4]), `"kind"`, `"mood":1,"kind"`, 1), nil, 422, 0},
		{"Oversized", `{"records":["` + strings.Repeat("x", 3<<20) + `"]}`, nil, 413, 0},
		{"OtherBundle", upload(t, foreign), nil, 409, 0},
		{"NoToken", upload(t, d.records[4]), map[string]string{"Authorization": ""}, 401, 0},
		{"ForgedToken", upload(t, d.records[4]), map[string]string{"Authorization": "Bearer " + forged}, 401, 0},
		{"SessionToken", upload(t, d.records[4]), map[string]string{"Authorization": "Bearer " + session}, 401, 0},
		{"OtherSite", upload(t, d.records[4]), map[string]string{"Origin": "https://evil.example"}, 403, 0},
		{"GoesOn", upload(t, d.records[4:]...), nil, 200, float64(len(d.records))},
		{"AfterTheEnd", upload(t, withSequence(d.records[4], len(d.records)+1)), nil, 409, 0},
	}
	for _, step := range steps {
		sender := d
		if step.name == "OtherBundle" {
			sender = other
		}
		status, answer := sender.send(http.MethodPost, path, step.body, step.header)
		acked, _ := answer["acknowledged"].(float64)
		if status != step.status || acked != step.acked {
			t.Errorf("%s: status %d, %v; want %d, acknowledged %v", step.name, status, answer, step.status, step.acked)
		}
		if step.acked == 0 {
			problem, _ := answer["error"].(map[string]any)
			if message, _ := problem["message"].(string); message == "" {
				t.Errorf("%s: no message", step.name)
			}
		}
	}
	status, answer := d.send(http.MethodGet, "/api/run", "", nil)
	if status != 200 || answer["outcome"] != "completed" || len(answer["records"].([]any)) != len(d.records) || answer["completion_code"] == nil {
		t.Errorf("the run afterwards: %d, outcome %v", status, answer["outcome"])
	}
}

// skipTo is the first record of a kind, renumbered.
func skipTo(records []run.Record, sequence int, kind run.Kind) run.Record {
	for i := range records {
		if records[i].Kind == kind {
			return withSequence(records[i], sequence)
		}
	}
	return run.Record{}
}

func withSequence(r run.Record, sequence int) run.Record {
	r.Sequence = sequence
	return r
}

// Withdrawal deletes what was given, everywhere, and frees the device.
func TestWithdrawal(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	d := newDevice(t, l, 5)
	if status, answer := d.send(http.MethodPost, "/api/run/records", upload(t, d.records[1:20]...), nil); status != 200 {
		t.Fatalf("status %d, %v", status, answer)
	}
	if status, answer := d.send(http.MethodPost, "/api/run/withdraw", "{}", nil); status != 200 || answer["outcome"] != "withdrawn" {
		t.Fatalf("status %d, %v", status, answer)
	}
	status, answer := d.send(http.MethodGet, "/api/run", "", nil)
	if status != 200 || answer["outcome"] != "withdrawn" || len(answer["records"].([]any)) != 0 {
		t.Errorf("after withdrawal: %d, %v", status, answer)
	}
	if status, _ := d.send(http.MethodPost, "/api/run/records", upload(t, d.records[20]), nil); status != http.StatusConflict {
		t.Errorf("a record after withdrawal: status %d, want 409", status)
	}
}

// A changed byte in bundle, engine, script or style stops the run with a plain
// message before the first page, in a real browser.
func TestChangedBytesStopTheRun(t *testing.T) {
	l := startLab(t, "motion-coherence")
	ctx := browser(t, 1000, 700)
	b, err := l.app.workspace.OpenBundle(context.Background(), l.study.Bundle)
	if err != nil {
		t.Fatal(err)
	}
	tests := []struct {
		name, pattern string
		change        func([]byte) []byte
		expect        string
	}{
		{"Unchanged", "/nothing", nil, "About this study"},
		{"Study", "/api/bundles/", func(b []byte) []byte {
			return bytes.Replace(b, []byte(`\"stimulus_ms\":400`), []byte(`\"stimulus_ms\":500`), 1)
		}, "could not be verified"},
		{"Text", "/api/bundles/", func(b []byte) []byte { return bytes.Replace(b, []byte("tire the eyes"), []byte("rest the eyes"), 1) }, "could not be verified"},
		{"Script", "/assets/" + b.Assets["participant_js"], func(b []byte) []byte { return append(b, ' ') }, "could not be started"},
		{"Keys", "/api/keys", func(b []byte) []byte { return bytes.Replace(b, []byte(`"x":"`), []byte(`"x":"A`), 1) }, "could not be"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			tab, cancel := chromedp.NewContext(ctx)
			defer cancel()
			if err := chromedp.Run(tab, emulation.SetDeviceMetricsOverride(1000, 700, 1, false)); err != nil {
				t.Fatal(err)
			}
			tamper(t, tab, tt.pattern, tt.change)
			timed, end := context.WithTimeout(tab, 60*time.Second)
			defer end()
			var text string
			err := chromedp.Run(timed, chromedp.Navigate(l.url+"/s/"+l.study.Link),
				chromedp.Poll(`document.querySelector("main").innerText.includes(`+jsonText(tt.expect)+`) && getComputedStyle(document.querySelector("main").firstElementChild).visibility === "visible" && document.body.innerText`, &text, chromedp.WithPollingInterval(200*time.Millisecond), chromedp.WithPollingTimeout(50*time.Second)))
			if err != nil {
				_ = chromedp.Run(tab, chromedp.Evaluate(`document.body.innerText.slice(0, 300)`, &text))
				t.Errorf("%v; the page says: %s", err, text)
			}
		})
	}
}

// A changed engine is found before a run exists.
func TestChangedEngineStopsTheRun(t *testing.T) {
	l := startLab(t, "motion-coherence")
	b, err := l.app.workspace.OpenBundle(context.Background(), l.study.Bundle)
	if err != nil {
		t.Fatal(err)
	}
	p := &participant{t: t, ctx: browser(t, 1000, 700), lab: l}
	tamper(t, p.ctx, "/assets/"+b.Assets["engine"], func(b []byte) []byte { b[len(b)/2] ^= 1; return b })
	p.do(emulation.SetDeviceMetricsOverride(1000, 700, 1, false), chromedp.Navigate(l.url+"/s/"+l.study.Link))
	p.consent()
	p.see("page-not-verified")
	runs, err := l.app.store.FindRuns(context.Background(), l.id, l.study.ID)
	if err != nil || len(runs) != 0 {
		t.Errorf("%d runs, %v", len(runs), err)
	}
}

// tamper changes the answers to requests whose address holds pattern.
func tamper(t *testing.T, tab context.Context, pattern string, change func([]byte) []byte) {
	t.Helper()
	chromedp.ListenTarget(tab, func(event any) {
		paused, ok := event.(*fetch.EventRequestPaused)
		if !ok {
			return
		}
		go func() {
			executor := chromedp.FromContext(tab)
			ctx := cdpContext(tab, executor)
			if change == nil || !strings.Contains(paused.Request.URL, pattern) {
				_ = fetch.ContinueRequest(paused.RequestID).Do(ctx)
				return
			}
			body, err := fetch.GetResponseBody(paused.RequestID).Do(ctx)
			if err != nil {
				_ = fetch.ContinueRequest(paused.RequestID).Do(ctx)
				return
			}
			changed := change(bytes.Clone(body))
			if bytes.Equal(changed, body) {
				t.Errorf("nothing was changed in %s", paused.Request.URL)
			}
			var headers []*fetch.HeaderEntry
			for _, h := range paused.ResponseHeaders {
				if !strings.EqualFold(h.Name, "Content-Encoding") && !strings.EqualFold(h.Name, "Content-Length") {
					headers = append(headers, h)
				}
			}
			_ = fetch.FulfillRequest(paused.RequestID, paused.ResponseStatusCode).WithResponseHeaders(headers).WithBody(encodeBody(changed)).Do(ctx)
		}()
	})
	if err := chromedp.Run(tab, fetch.Enable().WithPatterns([]*fetch.RequestPattern{{URLPattern: "*", RequestStage: fetch.RequestStageResponse}})); err != nil {
		t.Fatal(err)
	}
}

func cdpContext(ctx context.Context, c *chromedp.Context) context.Context {
	return cdp.WithExecutor(ctx, c.Target)
}

func encodeBody(b []byte) string { return base64.StdEncoding.EncodeToString(b) }
