package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net/http"
	"slices"
	"sync"
	"time"

	"github.com/jackc/pgx/v5"

	"distal/experiments/library"
)

// report is what the drill found.
type report struct {
	seconds             float64 // of the load
	runs, completed     int
	records, trials     int // acknowledged
	again               int // attempts that failed and were made again
	median, p99, worst  time.Duration
	commits             int64   // of the database, 0 if it was killed in between
	serverCPU, database float64 // processor seconds of the server and of Postgres, 0 if they were killed in between
	ownCPU              float64 // processor seconds of the participants
	missing, unknown    int     // records acknowledged and not there; there and never sent
	altered, trialsLost int     // records with other content; trials that miss in their table
}

// drill opens a house, loads it and looks for every acknowledged record.
func drill(ctx context.Context, o options, out io.Writer) (r report, err error) {
	st, problems := library.Read(o.study)
	if problems.Failed() {
		return r, problems
	}
	st.Quota.Runs = 0
	h, err := openHouse(ctx, st)
	if err != nil {
		return r, err
	}
	defer h.close()
	if err := checkDurability(ctx, h.cluster.ServerURL()); err != nil {
		return r, err
	}
	s, err := rehearse(st, h.bundle)
	if err != nil {
		return r, err
	}
	fmt.Fprintf(out, "%d participants upload runs of %d records one by one for %v ...\n", o.clients, len(s.records), o.length)
	before, used := commits(ctx, h.cluster.OwnerURL()), h.processorSeconds()
	people, seconds, err := load(ctx, o, h, s, out)
	if err != nil {
		return r, err
	}
	r.seconds = seconds
	if !o.faults {
		r.commits = commits(ctx, h.cluster.OwnerURL()) - before
		now := h.processorSeconds()
		r.serverCPU, r.database, r.ownCPU = now.server-used.server, now.postgres-used.postgres, now.own-used.own
	}
	r.sum(people, len(s.records))
	fmt.Fprintln(out, "killing Postgres, starting it again and looking for every record ...")
	if err := h.crashPostgres(ctx); err != nil {
		return r, err
	}
	return r, r.look(ctx, h.cluster.OwnerURL(), people, s)
}

// checkDurability makes sure that nothing is acknowledged before it is on disk.
func checkDurability(ctx context.Context, server string) error {
	conn, err := pgx.Connect(ctx, server)
	if err != nil {
		return err
	}
	defer conn.Close(ctx)
	for _, setting := range []string{"synchronous_commit", "fsync"} {
		var state string
		if err := conn.QueryRow(ctx, `SHOW `+setting).Scan(&state); err != nil {
			return err
		}
		if state != "on" {
			return fmt.Errorf("%s is %s: the drill would show nothing", setting, state)
		}
	}
	return nil
}

// commits is the number of transactions that the database has committed, 0 if it does not say.
func commits(ctx context.Context, owner string) (n int64) {
	conn, err := pgx.Connect(ctx, owner)
	if err != nil {
		return 0
	}
	defer conn.Close(ctx)
	if err := conn.QueryRow(ctx, `SELECT xact_commit FROM pg_stat_database WHERE datname = current_database()`).Scan(&n); err != nil {
		return 0
	}
	return n
}

// load lets the participants work for as long as the options say.
func load(ctx context.Context, o options, h *house, s *script, out io.Writer) ([]*participant, float64, error) {
	transport := &http.Transport{MaxIdleConnsPerHost: o.clients, MaxConnsPerHost: o.clients}
	defer transport.CloseIdleConnections()
	working, end := context.WithTimeout(ctx, o.length)
	defer end()
	people := make([]*participant, o.clients)
	var wait sync.WaitGroup
	start := time.Now()
	for i := range people {
		p := &participant{script: s, origin: "http://" + h.address, link: h.link, browser: &http.Client{Transport: transport, Timeout: 30 * time.Second}}
		people[i] = p
		wait.Go(func() { p.take(working) })
	}
	var failed error
	if o.faults {
		failed = crash(working, o, h, out)
	}
	wait.Wait()
	seconds := time.Since(start).Seconds()
	for _, p := range people {
		if p.confusion != nil {
			failed = errors.Join(failed, p.confusion)
		}
	}
	return people, seconds, failed
}

// crash kills the server after a third of the time and Postgres after two thirds.
func crash(working context.Context, o options, h *house, out io.Writer) error {
	ctx := context.WithoutCancel(working) // a house is always put right again
	for _, fault := range []struct {
		name string
		do   func(context.Context) error
	}{{"the server", h.crashServer}, {"Postgres", h.crashPostgres}} {
		select {
		case <-time.After(o.length / 3):
		case <-working.Done():
			return working.Err()
		}
		start := time.Now()
		if err := fault.do(ctx); err != nil {
			return err
		}
		fmt.Fprintf(out, "%s was killed and was back after %.1f s\n", fault.name, time.Since(start).Seconds())
	}
	return nil
}

// sum adds up what the participants saw.
func (r *report) sum(people []*participant, length int) {
	var waits []time.Duration
	for _, p := range people {
		r.runs += len(p.runs)
		r.trials += p.trials
		r.again += p.again
		waits = append(waits, p.waits...)
		for _, t := range p.runs {
			r.records += t.acknowledged
			if t.acknowledged == length {
				r.completed++
			}
		}
	}
	slices.Sort(waits)
	if n := len(waits); n > 0 {
		r.median, r.p99, r.worst = waits[n/2], waits[n*99/100], waits[n-1]
	}
}

// look compares what is in the database with what was sent and acknowledged.
func (r *report) look(ctx context.Context, owner string, people []*participant, s *script) error {
	conn, err := pgx.Connect(ctx, owner)
	if err != nil {
		return err
	}
	defer conn.Close(ctx)
	stored := map[string]int{} // run → records
	rows, err := conn.Query(ctx, `SELECT run_id::text, sequence, body FROM records ORDER BY run_id, sequence`)
	if err != nil {
		return err
	}
	var id, body string
	var sequence int
	if _, err := pgx.ForEachRow(rows, []any{&id, &sequence, &body}, func() error {
		stored[id]++
		switch {
		case sequence != stored[id] || sequence > len(s.records):
			r.unknown++
		case body != s.records[sequence-1]:
			r.altered++
		}
		return nil
	}); err != nil {
		return err
	}
	for _, p := range people {
		for _, t := range p.runs {
			r.missing += max(0, t.acknowledged-stored[t.id])
			// The last upload may have been stored without its answer arriving.
			r.unknown += max(0, stored[t.id]-t.acknowledged-1)
		}
	}
	return conn.QueryRow(ctx, `SELECT abs((SELECT count(*) FROM trials) - (SELECT count(*) FROM records WHERE kind = 'trial'))`).Scan(&r.trialsLost)
}

// rate is the number of acknowledged trials a second.
func (r *report) rate() float64 { return float64(r.trials) / r.seconds }

func (r *report) print(out io.Writer) {
	fmt.Fprintf(out, "acknowledged   %d trials in %.1f s: %.0f trials a second (%d records, %d runs begun, %d completed)\n",
		r.trials, r.seconds, r.rate(), r.records, r.runs, r.completed)
	fmt.Fprintf(out, "waiting        median %.1f ms, 99%% within %.1f ms, at most %.1f ms\n", ms(r.median), ms(r.p99), ms(r.worst))
	if r.commits > 0 {
		fmt.Fprintf(out, "commits        %d by the database: %.1f records share one\n", r.commits, float64(r.records)/float64(r.commits))
	}
	if r.serverCPU > 0 {
		per := func(seconds float64) float64 { return 1000 * seconds / float64(max(r.records, 1)) }
		fmt.Fprintf(out, "processor      %.2f ms a record in the server, %.2f ms in Postgres, %.2f ms in the participants\n",
			per(r.serverCPU), per(r.database), per(r.ownCPU))
	}
	fmt.Fprintf(out, "sent again     %d attempts failed and were made again\n", r.again)
	fmt.Fprintf(out, "looked for     %d acknowledged records: %d missing, %d altered, %d never sent, %d trials without their row\n",
		r.records, r.missing, r.altered, r.unknown, r.trialsLost)
}

func ms(d time.Duration) float64 { return d.Seconds() * 1000 }

// verdict is an error unless every acknowledged record is there, once and as it was sent.
func (r *report) verdict() error {
	switch {
	case r.trials == 0:
		return errors.New("no trial was acknowledged")
	case r.missing+r.altered+r.unknown+r.trialsLost > 0:
		return errors.New("the records are not those that were acknowledged")
	}
	return nil
}

// speed is an error if the target was missed.
func (r *report) speed(o options) error {
	if r.rate() < o.target {
		return fmt.Errorf("%.0f trials a second were acknowledged, %.0f are wanted", r.rate(), o.target)
	}
	return nil
}
