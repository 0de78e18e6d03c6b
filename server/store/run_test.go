package store_test

import (
	"context"
	"errors"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/store"
)

var farAway = time.Now().Add(24 * time.Hour)

// Asking twice for a run, even at once, makes one.
func TestCreateRunOnce(t *testing.T) {
	t.Parallel()
	f := setup(t)
	n := f.newRun()
	var wait sync.WaitGroup
	runs := make([]store.Run, 8)
	for i := range runs {
		wait.Go(func() {
			// The first of several at once may win after the others looked: a browser asks again.
			for range 3 {
				var err error
				if runs[i], err = f.store.CreateRun(context.Background(), f.lab, n, f.spec, f.consent()); err == nil {
					return
				} else if !errors.Is(err, store.ErrConflict) {
					t.Error(err)
				}
			}
			t.Error("no run after three times")
		})
	}
	wait.Wait()
	for _, r := range runs {
		if r.ID != runs[0].ID || r.Seed != runs[0].Seed || r.Order != runs[0].Order || r.Sequence != 1 {
			t.Errorf("run %+v, want %+v", r, runs[0])
		}
	}
	list, err := f.store.FindRuns(context.Background(), f.lab, f.study)
	if err != nil || len(list) != 1 {
		t.Errorf("%d runs, %v; want 1", len(list), err)
	}
}

// A device takes part once in a study, an invitation serves once.
func TestTakePartOnce(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	n := f.newRun()
	create := func(n store.NewRun) error {
		n.CreationKey = uuid.NewString()
		_, err := f.store.CreateRun(ctx, f.lab, n, f.spec, f.consent())
		return err
	}
	if err := create(n); err != nil {
		t.Fatal(err)
	}
	if err := create(n); !errors.Is(err, store.ErrConflict) {
		t.Errorf("the same device again: %v, want a conflict", err)
	}
	invitations, err := f.store.CreateInvitations(ctx, f.lab, f.person, f.study, "", 2)
	if err != nil {
		t.Fatal(err)
	}
	invited := store.NewRun{Study: f.study, Invitation: invitations[0].ID, ParticipantKey: n.ParticipantKey}
	if err := create(invited); err != nil {
		t.Errorf("invited: %v", err)
	}
	if err := create(invited); !errors.Is(err, store.ErrConflict) {
		t.Errorf("the same invitation again: %v, want a conflict", err)
	}
	found, err := f.store.FindInvitation(ctx, f.lab, invitations[0].ID)
	if err != nil || !found.Used {
		t.Errorf("invitation %+v, %v: want it used", found, err)
	}
	// Simulated runs stand in nobody's way.
	simulated := n
	simulated.Simulated = true
	if err := create(simulated); err != nil {
		t.Errorf("simulated: %v", err)
	}
	again := f.newRun()
	if err := create(again); err != nil {
		t.Fatal(err)
	}
	taken, outcome, err := f.store.TakenPart(ctx, f.lab, f.study, again.ParticipantKey)
	if err != nil || !taken || outcome != "" {
		t.Errorf("taken %v, outcome %q, %v", taken, outcome, err)
	}
}

// However many come at once, no more are let in than the quota says; a
// withdrawal, an exclusion and a simulated run leave a place free.
func TestQuota(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	const quota, comers = 5, 40
	f.study = f.launch(f.lab, f.person, quota)
	var wait sync.WaitGroup
	var admitted, full atomic.Int32
	for range comers {
		wait.Go(func() {
			_, err := f.store.CreateRun(ctx, f.lab, f.newRun(), f.spec, f.consent())
			var expected *store.Error
			switch {
			case err == nil:
				admitted.Add(1)
			case errors.As(err, &expected) && expected.Code == "full":
				full.Add(1)
			default:
				t.Error(err)
			}
		})
	}
	wait.Wait()
	if admitted.Load() != quota || full.Load() != comers-quota {
		t.Fatalf("%d admitted, %d told that it is full; want %d and %d", admitted.Load(), full.Load(), quota, comers-quota)
	}
	runs, err := f.store.FindRuns(ctx, f.lab, f.study)
	if err != nil {
		t.Fatal(err)
	}
	orders := map[int]bool{}
	for _, r := range runs {
		orders[r.Order] = true
		records := append(f.records(1), f.debrief(8))
		f.append(r.ID, 8, records...)
	}
	if len(orders) != quota {
		t.Errorf("%d different order numbers, want %d", len(orders), quota)
	}
	refuse := func(when string) {
		t.Helper()
		if _, err := f.store.CreateRun(ctx, f.lab, f.newRun(), f.spec, f.consent()); !errors.Is(err, &store.Error{Kind: store.Conflict, Code: "full"}) {
			t.Errorf("%s: %v, want full", when, err)
		}
	}
	refuse("all completed")
	if err := f.store.Withdraw(ctx, f.lab, runs[0].ID); err != nil {
		t.Fatal(err)
	}
	f.begin()
	refuse("after a withdrawal was made up for")
	if err := f.store.Exclude(ctx, f.lab, f.person, runs[1].ID, "", true, "guessed"); err != nil {
		t.Fatal(err)
	}
	f.begin()
	refuse("after an exclusion was made up for")
	simulated := f.newRun()
	simulated.Simulated = true
	if _, err := f.store.CreateRun(ctx, f.lab, simulated, f.spec, f.consent()); err != nil {
		t.Errorf("a simulated run in a full study: %v", err)
	}
}

// Paused, closed and changed studies admit nobody.
func TestStudyState(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	for _, state := range []string{store.StatePaused, store.StateClosed, store.StateOpen} {
		if err := f.store.SetStudyState(ctx, f.lab, f.person, f.study, state); err != nil {
			t.Fatal(err)
		}
		_, err := f.store.CreateRun(ctx, f.lab, f.newRun(), f.spec, f.consent())
		if (err == nil) != (state == store.StateOpen) {
			t.Errorf("%s: %v", state, err)
		}
	}
	stale := f.consent()
	stale.Bundle = "another"
	if _, err := f.store.CreateRun(ctx, f.lab, f.newRun(), f.spec, stale); !errors.Is(err, &store.Error{Kind: store.Conflict, Code: "other_bundle"}) {
		t.Errorf("consent under another bundle: %v", err)
	}
	if err := f.store.SetStudyState(ctx, f.lab, f.person, f.study, "ajar"); !errors.Is(err, store.ErrInvalid) {
		t.Errorf("state ajar: %v, want invalid", err)
	}
	if err := f.store.SetStudyQuota(ctx, f.lab, f.person, uuid.New(), 3); !errors.Is(err, store.ErrNotFound) {
		t.Errorf("quota of no study: %v, want not found", err)
	}
}

// Groups are dealt in turn by weight, so that they stay level.
func TestGroupsStayLevel(t *testing.T) {
	t.Parallel()
	f := setup(t)
	f.spec.Groups = []study.Group{{Name: "a", Weight: 1}, {Name: "b", Weight: 2}}
	n := map[int]int{}
	for i := range 9 {
		r := f.begin()
		n[r.Group]++
		if r.Order != i {
			t.Errorf("order %d, want %d", r.Order, i)
		}
	}
	if n[0] != 3 || n[1] != 6 {
		t.Errorf("groups %v, want 3 and 6", n)
	}
}

// Withdrawal deletes all that was given and keeps that it took place; nothing
// can be added afterwards.
func TestWithdraw(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	n := f.newRun()
	n.Browser = "Firefox 140, Linux"
	r, err := f.store.CreateRun(ctx, f.lab, n, f.spec, f.consent())
	if err != nil {
		t.Fatal(err)
	}
	f.append(r.ID, 9, f.records(3)...)
	if err := f.store.Exclude(ctx, f.lab, f.person, r.ID, "", true, "reason"); err != nil {
		t.Fatal(err)
	}
	for range 2 { // twice is as once
		if err := f.store.Withdraw(ctx, f.lab, r.ID); err != nil {
			t.Fatal(err)
		}
	}
	err = f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
		var left, facts, deleted int
		var key *string
		var browser string
		if err := tx.QueryRow(ctx, `SELECT (SELECT count(*) FROM records WHERE run_id = $1) + (SELECT count(*) FROM trials WHERE run_id = $1)
				+ (SELECT count(*) FROM consents WHERE run_id = $1) + (SELECT count(*) FROM exclusions WHERE run_id = $1),
			(SELECT count(*) FROM withdrawals WHERE run_id = $1), (SELECT records_deleted FROM withdrawals WHERE run_id = $1), participant_key, browser
			FROM runs WHERE run_id = $1`, r.ID).Scan(&left, &facts, &deleted, &key, &browser); err != nil {
			return err
		}
		if left != 0 || facts != 1 || deleted != 9 || key != nil || browser != "" {
			t.Errorf("%d rows left, %d withdrawals of %d records, participant %v, browser %q; want 0, 1, 9, nil, none", left, facts, deleted, key, browser)
		}
		return nil
	})
	if err != nil {
		t.Error(err)
	}
	// What the outbox still holds is not taken any more, old records are acknowledged.
	if ack, err := f.store.Append(ctx, f.lab, r.ID, f.records(3)); err != nil || ack.Outcome != store.OutcomeWithdrawn {
		t.Errorf("old records: %+v, %v", ack, err)
	}
	if _, err := f.store.Append(ctx, f.lab, r.ID, f.records(4)); !errors.Is(err, &store.Error{Kind: store.Conflict, Code: "ended"}) {
		t.Errorf("a new record: %v, want that the run has ended", err)
	}
	if n := len(f.stored(r.ID)); n != 0 {
		t.Errorf("%d records after withdrawal", n)
	}
	if err := f.store.Exclude(ctx, f.lab, f.person, r.ID, "", true, "reason"); !errors.Is(err, store.ErrNotFound) {
		t.Errorf("excluding a withdrawn run: %v, want not found", err)
	}
}

// A withdrawal in the middle of uploads leaves nothing behind, whichever wins.
func TestWithdrawDuringUploads(t *testing.T) {
	t.Parallel()
	f := setup(t)
	for range 10 {
		r := f.begin()
		f.append(r.ID, 6, f.preparation()...)
		var wait sync.WaitGroup
		wait.Go(func() {
			for i := range 20 {
				if _, err := f.store.Append(context.Background(), f.lab, r.ID, []run.Record{f.trial(7+i, i)}); err != nil && !errors.Is(err, store.ErrConflict) {
					t.Error(err)
				}
			}
		})
		wait.Go(func() {
			if err := f.store.Withdraw(context.Background(), f.lab, r.ID); err != nil {
				t.Error(err)
			}
		})
		wait.Wait()
		if n := len(f.stored(r.ID)); n != 0 {
			t.Fatalf("%d records after withdrawal", n)
		}
	}
}

// Exclusions are kept, each one; the newest holds, a person's above the rules'.
func TestExclude(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	r := f.complete()
	steps := []struct {
		actor    uuid.UUID
		rule     string
		excluded bool
		want     bool // excluded afterwards
		kept     int  // decisions kept
	}{
		{uuid.Nil, "catch", false, false, 0}, // a rule that never excluded says nothing
		{uuid.Nil, "catch", true, true, 1},
		{uuid.Nil, "catch", true, true, 1}, // unchanged
		{uuid.Nil, "frames", true, true, 2},
		{uuid.Nil, "catch", false, true, 3}, // the other rule still does
		{f.person, "", false, false, 4},     // a person decides against the rules
		{uuid.Nil, "catch", true, false, 5},
		{f.person, "", true, true, 6},
	}
	for i, s := range steps {
		if err := f.store.Exclude(ctx, f.lab, s.actor, r.ID, s.rule, s.excluded, "because"); err != nil {
			t.Fatal(err)
		}
		found, err := f.store.FindRun(ctx, f.lab, r.ID)
		if err != nil {
			t.Fatal(err)
		}
		list, err := f.store.FindExclusions(ctx, f.lab, f.study)
		if err != nil {
			t.Fatal(err)
		}
		if found.Excluded != s.want || len(list) != s.kept {
			t.Errorf("step %d: excluded %v, %d decisions; want %v, %d", i+1, found.Excluded, len(list), s.want, s.kept)
		}
	}
	if err := f.store.Exclude(ctx, f.lab, f.person, r.ID, "", true, ""); !errors.Is(err, store.ErrInvalid) {
		t.Errorf("without a reason: %v, want invalid", err)
	}
	st, err := f.store.FindStudy(ctx, f.lab, f.study)
	if err != nil || st.Completed != 1 || st.Excluded != 1 || st.Valid() != 0 {
		t.Errorf("study %+v, %v; want 1 completed, 1 excluded, 0 valid", st, err)
	}
}

// The ledger's chain holds, with many writers at once, and shows a change.
func TestLedger(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	var wait sync.WaitGroup
	for range 4 {
		wait.Go(func() {
			for i := range 10 {
				if err := f.store.SetStudyQuota(ctx, f.lab, f.person, f.study, i); err != nil {
					t.Error(err)
				}
			}
		})
	}
	wait.Wait()
	entries, err := f.store.Ledger(ctx, f.lab, 1000)
	if err != nil || len(entries) != 42 { // person added, study launched, 40 quotas
		t.Fatalf("%d entries, %v; want 42", len(entries), err)
	}
	if bad, err := f.store.VerifyLedger(ctx, f.lab); bad != 0 || err != nil {
		t.Fatalf("entry %d does not fit (%v)", bad, err)
	}
	owner := connect(t, f.owner) // only somebody with the owner's rights can tamper
	for _, change := range []struct {
		statement string
		bad       int64
	}{
		{`UPDATE ledger SET at = at + interval '1 microsecond' WHERE number = 30 AND lab_id = $1`, 30},
		{`UPDATE ledger SET detail = '{"quota":99}' WHERE number = 20 AND lab_id = $1`, 20},
		{`UPDATE ledger SET person_id = NULL WHERE number = 12 AND lab_id = $1`, 12},
		{`DELETE FROM ledger WHERE number = 7 AND lab_id = $1`, 8},
	} {
		if _, err := owner.Exec(ctx, `ALTER TABLE ledger DISABLE TRIGGER ledger_append_only`); err != nil {
			t.Fatal(err)
		}
		if _, err := owner.Exec(ctx, change.statement, f.lab); err != nil {
			t.Fatal(err)
		}
		if bad, err := f.store.VerifyLedger(ctx, f.lab); bad != change.bad || err != nil {
			t.Errorf("%s: entry %d (%v), want %d", change.statement, bad, err, change.bad)
		}
	}
}

// Whoever listens hears of new runs and records.
func TestListen(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx, cancel := context.WithCancel(context.Background())
	heard := make(chan uuid.UUID, 1000)
	ended := make(chan error, 1)
	go func() { ended <- f.store.Listen(ctx, func(id uuid.UUID) { heard <- id }) }()
	expect := func(what string, do func()) {
		t.Helper()
		for deadline := time.Now().Add(20 * time.Second); ; {
			do()
			select {
			case id := <-heard:
				if id != f.study {
					t.Errorf("%s: heard of %s, want %s", what, id, f.study)
				}
				for len(heard) > 0 {
					<-heard
				}
				return
			case <-time.After(200 * time.Millisecond): // listening may just have begun
				if time.Now().After(deadline) {
					t.Fatalf("%s: nothing heard", what)
				}
			}
		}
	}
	expect("a new run", func() { f.begin() })
	r := f.begin()
	<-heard
	next := 0
	expect("records", func() { f.append(r.ID, 2+next, f.preparation()[next]); next++ })
	cancel()
	if err := <-ended; !errors.Is(err, context.Canceled) {
		t.Errorf("listening ended with %v", err)
	}
}
