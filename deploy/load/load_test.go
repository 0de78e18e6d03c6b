package main

import (
	"context"
	"strings"
	"testing"
	"time"
)

// The drill itself, short, with the server and Postgres killed in the middle.
// How fast it is depends on the machine and is not tested here.
func TestDrillWithFaults(t *testing.T) {
	t.Parallel()
	o := options{clients: 12, length: 9 * time.Second, faults: true, study: "motion-coherence"}
	var out strings.Builder
	r, err := drill(context.Background(), o, &out)
	if err != nil {
		t.Fatalf("%v\n%s", err, out.String())
	}
	r.print(&out)
	t.Log(out.String())
	if err := r.verdict(); err != nil {
		t.Error(err)
	}
	if r.again == 0 {
		t.Error("no attempt failed although server and Postgres were killed: the faults tested nothing")
	}
	if r.records < r.trials || r.runs < o.clients {
		t.Errorf("the figures do not fit: %+v", r)
	}
}

// A report with anything wrong is not passed.
func TestVerdict(t *testing.T) {
	t.Parallel()
	good := report{seconds: 2, trials: 2200, records: 2300}
	if err := good.verdict(); err != nil {
		t.Error(err)
	}
	if good.speed(options{target: 1000}) != nil || good.speed(options{target: 1200}) == nil {
		t.Errorf("%.0f trials a second against targets of 1000 and 1200", good.rate())
	}
	for name, spoil := range map[string]func(*report){
		"missing": func(r *report) { r.missing = 1 }, "altered": func(r *report) { r.altered = 1 }, "unknown": func(r *report) { r.unknown = 1 },
		"no row": func(r *report) { r.trialsLost = 1 }, "nothing": func(r *report) { r.trials = 0 },
	} {
		bad := good
		spoil(&bad)
		if bad.verdict() == nil {
			t.Errorf("%s: passed", name)
		}
	}
}
