package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"strings"
	"time"

	"github.com/google/uuid"

	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

// script is what every participant sends: the records of one rehearsed run. The
// server stores what it gets, so that one script serves all.
type script struct {
	records []string // canonical JSON, by sequence − 1
	trial   []bool
}

// rehearse takes one simulated observer through the study.
func rehearse(st *study.Study, bundle string) (*script, error) {
	observer := rehearsal.Observer{Threshold: 0.2, Slope: 2, Lapse: 0.02, AgeYears: 34}
	records, err := rehearsal.Observe(st, run.Assignment{Seed: 0x10ad}, observer, rehearsal.DefaultScreen(), bundle, 1.8e12)
	if err != nil {
		return nil, err
	}
	s := &script{}
	for i := range records {
		text, err := value.Canonical(records[i].Encode())
		if err != nil {
			return nil, err
		}
		s.records, s.trial = append(s.records, string(text)), append(s.trial, records[i].Kind == run.KindTrial)
	}
	return s, nil
}

// participant takes one run after another, uploading record by record.
type participant struct {
	script  *script
	origin  string
	link    string
	browser *http.Client

	runs      []taken
	trials    int // acknowledged
	waits     []time.Duration
	again     int // attempts that failed and were made again
	confusion error
}

// taken is a run and how far it was acknowledged.
type taken struct {
	id           string
	acknowledged int
}

// take runs until ctx ends.
func (p *participant) take(ctx context.Context) {
	for ctx.Err() == nil && p.confusion == nil {
		token := p.begin(ctx)
		for sequence := 2; token != "" && sequence <= len(p.script.records) && ctx.Err() == nil && p.confusion == nil; sequence++ {
			p.upload(ctx, token, sequence)
		}
	}
}

// begin creates a run, asking until it is there; "" if ctx ended before.
func (p *participant) begin(ctx context.Context) string {
	consent := json.RawMessage(p.script.records[0])
	body, err := json.Marshal(map[string]any{"link": p.link, "invitation": nil, "language": "en", "consent": consent})
	if err != nil {
		p.confusion = err
		return ""
	}
	header := http.Header{"Idempotency-Key": {uuid.NewString()}}
	var answer struct {
		Run          string `json:"run"`
		Token        string `json:"token"`
		Acknowledged int    `json:"acknowledged"`
	}
	if p.insist(ctx, "/api/runs", header, body, &answer) {
		p.runs = append(p.runs, taken{answer.Run, answer.Acknowledged})
	}
	return answer.Token
}

// upload sends one record until it is acknowledged.
func (p *participant) upload(ctx context.Context, token string, sequence int) {
	header := http.Header{"Authorization": {"Bearer " + token}}
	body := []byte(`{"records":[` + p.script.records[sequence-1] + `]}`)
	var answer struct {
		Acknowledged int `json:"acknowledged"`
	}
	start := time.Now()
	if !p.insist(ctx, "/api/run/records", header, body, &answer) {
		return
	}
	if answer.Acknowledged != sequence {
		p.confusion = fmt.Errorf("record %d was sent and %d acknowledged: something that was acknowledged is lost", sequence, answer.Acknowledged)
		return
	}
	p.runs[len(p.runs)-1].acknowledged = sequence
	if p.script.trial[sequence-1] {
		p.trials++
		p.waits = append(p.waits, time.Since(start))
	}
}

// insist posts until the server has answered; false if ctx ended or the server refused.
func (p *participant) insist(ctx context.Context, path string, header http.Header, body []byte, answer any) bool {
	for pause := 20 * time.Millisecond; ctx.Err() == nil; pause = min(2*pause, 500*time.Millisecond) {
		status, text, err := p.post(ctx, path, header, body)
		switch {
		case err == nil && status < 300:
			if err := json.Unmarshal(text, answer); err != nil {
				p.confusion = fmt.Errorf("%s: %w", path, err)
			}
			return p.confusion == nil
		case err == nil && status < 500:
			p.confusion = fmt.Errorf("%s: status %d: %s", path, status, strings.TrimSpace(string(text)))
			return false
		}
		if ctx.Err() != nil {
			return false // cut short by the end of the drill
		}
		p.again++
		select {
		case <-time.After(pause):
		case <-ctx.Done():
		}
	}
	return false
}

func (p *participant) post(ctx context.Context, path string, header http.Header, body []byte) (status int, text []byte, err error) {
	request, err := http.NewRequestWithContext(ctx, http.MethodPost, p.origin+path, bytes.NewReader(body))
	if err != nil {
		return 0, nil, err
	}
	request.Header = header.Clone()
	request.Header.Set("Content-Type", "application/json")
	answer, err := p.browser.Do(request)
	if err != nil {
		return 0, nil, err
	}
	defer answer.Body.Close()
	text, err = io.ReadAll(answer.Body)
	return answer.StatusCode, text, err
}
