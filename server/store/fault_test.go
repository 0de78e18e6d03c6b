package store_test

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/experiments/run"
	"distal/server/postgres"
	"distal/server/store"
)

// client uploads the trials of one run, one at a time, and asks again after
// every failure until all are acknowledged.
type client struct {
	f            *fixture
	run          uuid.UUID
	acknowledged atomic.Int32 // trials
	failures     atomic.Int32
}

func (c *client) upload(trials int, until time.Time) {
	for i := 0; i < trials; {
		if time.Now().After(until) {
			c.f.Errorf("run %s: only %d of %d trials acknowledged in time", c.run, i, trials)
			return
		}
		sequence := 7 + i
		ack, err := c.f.store.Append(context.Background(), c.f.lab, c.run, []run.Record{c.f.trial(sequence, i)})
		switch {
		case errors.Is(err, store.ErrBusy):
			c.failures.Add(1)
			time.Sleep(20 * time.Millisecond)
		case err != nil:
			c.f.Errorf("run %s, trial %d: %v", c.run, i, err)
			return
		case ack.Sequence != sequence:
			c.f.Errorf("run %s: acknowledged up to %d after record %d: something that was acknowledged is lost", c.run, ack.Sequence, sequence)
			return
		default:
			i++
			c.acknowledged.Store(int32(i))
		}
	}
}

// faultCluster is a cluster of the test's own, to be broken.
func faultCluster(t *testing.T) (c *postgres.Cluster, dir string) {
	t.Helper()
	above, err := os.MkdirTemp("", "distal-fault-")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(above) })
	if err := os.Chmod(above, 0o711); err != nil {
		t.Fatal(err)
	}
	dir = filepath.Join(above, "data")
	if c, err = postgres.Start(context.Background(), dir); err != nil {
		t.Fatal(err)
	}
	if _, err := postgres.Migrate(context.Background(), c.OwnerURL()); err != nil {
		t.Fatal(err)
	}
	return c, dir
}

// Postgres is killed, stopped and cut off while many runs upload. Every record
// that was acknowledged is there, once and unchanged; what failed goes through
// when it is sent again; clients hear nothing but that they should try again.
func TestPostgresFails(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	cluster, dir := faultCluster(t)
	defer func() { cluster.Stop() }()
	f := setupAt(t, cluster.OwnerURL(), cluster.ServerURL())
	const runs, trials = 16, 200
	clients := make([]*client, runs)
	for i := range clients {
		r := f.begin()
		f.append(r.ID, 6, f.preparation()...)
		clients[i] = &client{f: f, run: r.ID}
	}
	var wait sync.WaitGroup
	until := time.Now().Add(4 * time.Minute)
	for _, c := range clients {
		wait.Go(func() { c.upload(trials, until) })
	}
	total := func() (acknowledged, failures int) {
		for _, c := range clients {
			acknowledged += int(c.acknowledged.Load())
			failures += int(c.failures.Load())
		}
		return acknowledged, failures
	}
	awaitShare := func(share float64) {
		for acknowledged, _ := total(); float64(acknowledged) < share*runs*trials && !t.Failed() && time.Now().Before(until); acknowledged, _ = total() {
			time.Sleep(time.Millisecond)
		}
	}
	restart := func() {
		var err error
		if cluster, err = postgres.Start(ctx, dir); err != nil {
			t.Fatal(err)
		}
	}
	faults := []struct {
		share float64 // of all trials, when it strikes
		name  string
		do    func()
	}{
		{0.15, "killed", func() { cluster.Kill() }},
		{0.35, "stopped", func() {
			if err := cluster.Stop(); err != nil {
				t.Error(err)
			}
		}},
		{0.55, "connections cut", func() { cut(t, cluster.OwnerURL()) }},
		{0.75, "killed again", func() { cluster.Kill() }},
	}
	for _, fault := range faults {
		awaitShare(fault.share)
		before := make([]int32, runs)
		for i, c := range clients {
			before[i] = c.acknowledged.Load()
		}
		_, failures := total()
		fault.do()
		if fault.name != "connections cut" {
			restart()
		}
		kept := storedTrials(t, cluster.OwnerURL())
		for i, c := range clients {
			if kept[c.run] < before[i] {
				t.Errorf("%s: %d trials of a run are there, %d had been acknowledged", fault.name, kept[c.run], before[i])
			}
		}
		awaitShare(fault.share + 0.1)
		if _, now := total(); now == failures && fault.name != "connections cut" {
			t.Errorf("%s: no client noticed: the fault tested nothing", fault.name)
		}
	}
	wait.Wait()
	want := append([]run.Record{f.consent()}, f.records(trials)...)
	for _, c := range clients {
		if diff := cmp.Diff(want, f.stored(c.run), cmpopts.EquateNaNs(), cmpopts.EquateEmpty()); diff != "" {
			t.Fatalf("run %s (-sent +stored):\n%s", c.run, diff)
		}
	}
	acknowledged, failures := total()
	t.Logf("%d trials acknowledged, %d attempts failed", acknowledged, failures)
}

// cut ends the connections of the server from the other side.
func cut(t *testing.T, owner string) {
	t.Helper()
	conn, err := pgx.Connect(context.Background(), owner)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close(context.Background())
	if _, err := conn.Exec(context.Background(), `SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE usename = 'distal_server'`); err != nil {
		t.Fatal(err)
	}
}

// storedTrials counts the trials of each run as the owner sees them.
func storedTrials(t *testing.T, owner string) map[uuid.UUID]int32 {
	t.Helper()
	conn, err := pgx.Connect(context.Background(), owner)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close(context.Background())
	rows, err := conn.Query(context.Background(), `SELECT run_id, count(*)::integer FROM trials GROUP BY run_id`)
	if err != nil {
		t.Fatal(err)
	}
	kept := map[uuid.UUID]int32{}
	var id uuid.UUID
	var n int32
	if _, err := pgx.ForEachRow(rows, []any{&id, &n}, func() error { kept[id] = n; return nil }); err != nil {
		t.Fatal(err)
	}
	return kept
}

// While Postgres is away every question is answered with "try again", and
// closing the store does not hang.
func TestPostgresAway(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	cluster, dir := faultCluster(t)
	f := setupAt(t, cluster.OwnerURL(), cluster.ServerURL())
	r := f.begin()
	n := f.newRun()
	cluster.Kill()
	questions := map[string]func() error{
		"append":   func() error { _, err := f.store.Append(ctx, f.lab, r.ID, f.records(1)); return err },
		"create":   func() error { _, err := f.store.CreateRun(ctx, f.lab, n, f.spec, f.consent()); return err },
		"find":     func() error { _, err := f.store.FindRun(ctx, f.lab, r.ID); return err },
		"withdraw": func() error { return f.store.Withdraw(ctx, f.lab, r.ID) },
		"by link":  func() error { _, _, err := f.store.FindStudyByLink(ctx, "study-link"); return err },
		"bundle":   func() error { _, _, err := f.store.FindBundle(ctx, f.bundle); return err },
		"asset":    func() error { _, _, _, err := f.store.FindAsset(ctx, f.bundle); return err },
		"labs":     func() error { _, err := f.store.Labs(ctx); return err },
		"keys":     func() error { _, err := f.store.PublicKeys(ctx); return err },
		"ping":     func() error { return f.store.Ping(ctx) },
	}
	for name, ask := range questions {
		if err := ask(); !errors.Is(err, store.ErrBusy) {
			t.Errorf("%s: %v, want that it should be tried again", name, err)
		}
	}
	cluster, err := postgres.Start(ctx, dir)
	if err != nil {
		t.Fatal(err)
	}
	// The pool finds its way back by itself.
	f.append(r.ID, 7, f.records(1)...)
	if _, err := f.store.CreateRun(ctx, f.lab, n, f.spec, f.consent()); err != nil {
		t.Error(err)
	}
	cluster.Kill()
	closed := make(chan struct{})
	go func() { f.store.Close(); close(closed) }()
	select {
	case <-closed:
	case <-time.After(time.Minute):
		t.Fatal("closing hangs without a database")
	}
	if _, err := f.store.Append(ctx, f.lab, r.ID, f.records(2)); !errors.Is(err, store.ErrBusy) {
		t.Errorf("append after closing: %v, want busy", err)
	}
}
