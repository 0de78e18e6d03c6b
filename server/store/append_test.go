package store_test

import (
	"context"
	"errors"
	"math/rand/v2"
	"slices"
	"sync"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"
	"pgregory.net/rapid"

	"distal/experiments/run"
	"distal/server/store"
)

// What is stored is what was sent, and trials stand in their table as well.
func TestAppendStoresWhatWasSent(t *testing.T) {
	t.Parallel()
	f := setup(t)
	r := f.begin()
	records := f.records(3)
	silent := f.trial(10, 3)
	silent.Trial.Response, silent.Trial.Correct, silent.Trial.ResponseMs, silent.Trial.Level = "", -1, nan(), nan()
	records = append(records, silent)
	ack := f.append(r.ID, 10, records...)
	if ack.Outcome != "" || ack.CompletionCode != "" {
		t.Errorf("the run is not at its end: %+v", ack)
	}
	want := append([]run.Record{f.consent()}, records...)
	if diff := cmp.Diff(want, f.stored(r.ID), cmpopts.EquateNaNs(), cmpopts.EquateEmpty()); diff != "" {
		t.Errorf("stored records differ from those sent (-sent +stored):\n%s", diff)
	}
	err := f.store.InLab(context.Background(), f.lab, func(tx pgx.Tx) error {
		var trials, silent, right int
		if err := tx.QueryRow(context.Background(), `SELECT count(*), count(*) FILTER (WHERE response IS NULL AND correct IS NULL AND rt_ms IS NULL AND level IS NULL),
				count(*) FILTER (WHERE level = 0.25 AND correct AND rt_ms = 612.5 AND frame_steps = '1x36' AND refresh_ms = 16.67)
			FROM trials WHERE run_id = $1`, r.ID).Scan(&trials, &silent, &right); err != nil {
			return err
		}
		if trials != 4 || silent != 1 || right != 3 {
			t.Errorf("%d trials, %d without an answer, %d with the right values; want 4, 1, 3", trials, silent, right)
		}
		return nil
	})
	if err != nil {
		t.Error(err)
	}
}

// Duplicates, gaps and other orders are answered as the design says.
func TestAppendOrder(t *testing.T) {
	t.Parallel()
	f := setup(t)
	changed := f.trial(7, 0)
	changed.Trial.Response = "right"
	ended := append(f.records(1), f.debrief(8))
	tests := map[string]struct {
		before, sent []run.Record // before was sent and acknowledged
		want         int          // acknowledged afterwards
		err          error
		code         string
	}{
		"again":                         {f.records(2), f.records(2), 8, nil, ""},
		"again and more":                {f.records(2), f.records(5), 11, nil, ""},
		"only old ones":                 {f.records(2), f.records(2)[1:3], 8, nil, ""},
		"backwards":                     {nil, backwards(f.records(4)), 10, nil, ""},
		"a gap":                         {f.records(1), f.records(4)[7:], 7, nil, ""},
		"a gap in the middle":           {f.records(1), slices.Delete(f.records(4), 7, 8), 8, nil, ""},
		"other content":                 {f.records(1), []run.Record{changed}, 7, store.ErrConflict, "other_record"},
		"other content, then new":       {f.records(1), []run.Record{changed, f.trial(8, 1)}, 7, store.ErrConflict, "other_record"},
		"twice in one upload":           {f.records(0), []run.Record{f.trial(7, 0), f.trial(7, 0)}, 7, store.ErrInvalid, "twice"},
		"the same trial twice":          {f.records(1), []run.Record{f.trial(8, 0)}, 7, store.ErrConflict, "trials_number_once"},
		"a second consent":              {f.records(0), []run.Record{consentAt(f, 7)}, 6, store.ErrConflict, "order"},
		"a withdrawal":                  {f.records(0), []run.Record{{Sequence: 7, Kind: run.KindWithdrawal, Bundle: f.bundle}}, 6, store.ErrConflict, "order"},
		"a trial before the screen":     {f.preparation()[:2], []run.Record{f.trial(4, 0)}, 3, store.ErrConflict, "order"},
		"the end before trials":         {f.preparation(), []run.Record{f.debrief(7)}, 6, store.ErrConflict, "order"},
		"after the end":                 {ended, []run.Record{f.trial(9, 1)}, 8, store.ErrConflict, "ended"},
		"the end again":                 {ended, []run.Record{f.debrief(8)}, 8, nil, ""},
		"of another bundle":             {f.records(0), []run.Record{otherBundle(f.trial(7, 0))}, 6, store.ErrConflict, "other_bundle"},
		"a NUL character":               {f.records(0), []run.Record{withBlock(f.trial(7, 0), "a\x00b")}, 6, store.ErrInvalid, "value"},
		"good ones before a bad one":    {f.preparation(), []run.Record{f.trial(7, 0), f.debrief(8), f.trial(9, 1)}, 8, store.ErrConflict, "ended"},
		"an event in between":           {f.preparation()[:1], []run.Record{{Sequence: 3, Kind: run.KindEvent, Bundle: f.bundle, Event: &run.Event{Name: "hidden"}}}, 3, nil, ""},
		"calibrated again after trials": {f.records(1), []run.Record{{Sequence: 8, Kind: run.KindCard, Bundle: f.bundle, Card: &run.Card{PxPerMm: 3, PixelRatio: 2}}}, 8, nil, ""},
	}
	for name, test := range tests {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			f := &fixture{TB: t, store: f.store, lab: f.lab, study: f.study, spec: f.spec, bundle: f.bundle}
			r := f.begin()
			if len(test.before) > 0 {
				f.append(r.ID, 1+len(test.before), test.before...)
			}
			_, err := f.store.Append(context.Background(), f.lab, r.ID, test.sent)
			var expected *store.Error
			if !errors.Is(err, test.err) || test.err != nil && (!errors.As(err, &expected) || expected.Code != test.code) {
				t.Errorf("error %#v, want %v with code %q", err, test.err, test.code)
			}
			stored := f.stored(r.ID)
			if len(stored) != test.want {
				t.Errorf("%d records stored, want %d", len(stored), test.want)
			}
			for i := range stored {
				if stored[i].Sequence != i+1 {
					t.Fatalf("record %d stands at place %d", stored[i].Sequence, i+1)
				}
			}
		})
	}
}

func backwards(records []run.Record) []run.Record {
	slices.Reverse(records)
	return records
}

func consentAt(f *fixture, sequence int) run.Record {
	r := f.consent()
	r.Sequence = sequence
	return r
}

func otherBundle(r run.Record) run.Record {
	r.Bundle = "another"
	return r
}

func withBlock(r run.Record, name string) run.Record {
	r.Trial.Block = name
	return r
}

// Records of a run of another lab, or of no run, are not found.
func TestAppendForeignRun(t *testing.T) {
	t.Parallel()
	f := setup(t)
	r := f.begin()
	other, _ := f.makeLab("Other Lab")
	for name, where := range map[string][2]uuid.UUID{"run of another lab": {other, r.ID}, "no run": {f.lab, uuid.New()}, "no lab": {uuid.New(), r.ID}} {
		if _, err := f.store.Append(context.Background(), where[0], where[1], f.records(1)); !errors.Is(err, store.ErrNotFound) {
			t.Errorf("%s: error %v, want not found", name, err)
		}
	}
	if n := len(f.stored(r.ID)); n != 1 {
		t.Errorf("%d records, want the consent alone", n)
	}
}

// Whatever the order, repetition and cutting of uploads, a client that sends
// what is not acknowledged ends with every record stored once.
func TestAppendAnyOrder(t *testing.T) {
	t.Parallel()
	f := setup(t)
	all := f.records(8)
	rapid.Check(t, func(rt *rapid.T) {
		r := f.begin()
		acknowledged := 1
		for range 500 {
			if acknowledged == 1+len(all) {
				break
			}
			from := rapid.IntRange(0, len(all)-1).Draw(rt, "from")
			from = min(from, rapid.IntRange(0, acknowledged-1).Draw(rt, "back"))
			to := rapid.IntRange(from+1, len(all)).Draw(rt, "to")
			upload := slices.Clone(all[from:to])
			if rapid.Bool().Draw(rt, "backwards") {
				slices.Reverse(upload)
			}
			ack, err := f.store.Append(context.Background(), f.lab, r.ID, upload)
			if err != nil {
				rt.Fatal(err)
			}
			if want := max(acknowledged, to+1); ack.Sequence != want {
				rt.Fatalf("acknowledged %d after records %d to %d, want %d", ack.Sequence, from+2, to+1, want)
			}
			acknowledged = ack.Sequence
		}
		ack, err := f.store.Append(context.Background(), f.lab, r.ID, all)
		if err != nil || ack.Sequence != 1+len(all) {
			rt.Fatalf("all at once: %d, %v", ack.Sequence, err)
		}
		if diff := cmp.Diff(append([]run.Record{f.consent()}, all...), f.stored(r.ID), cmpopts.EquateNaNs(), cmpopts.EquateEmpty()); diff != "" {
			rt.Fatal(diff)
		}
	})
}

// Many runs of two labs upload at once, good and bad ones mixed; the bad ones
// alone are refused. Two uploads of one run may overlap.
func TestAppendTogether(t *testing.T) {
	t.Parallel()
	f := setup(t)
	const runs, trials = 60, 20
	labs := []*fixture{f, {TB: t, store: f.store}}
	labs[1].lab, labs[1].person = labs[1].makeLab("Second Lab")
	labs[1].study = labs[1].launch(labs[1].lab, labs[1].person, 0)
	var wait sync.WaitGroup
	for i := range runs {
		f := labs[i%2]
		r := f.begin()
		f.append(r.ID, 6, f.preparation()...)
		for part := range 2 {
			wait.Go(func() {
				draw := rand.New(rand.NewPCG(uint64(i), uint64(part)))
				for n := range trials {
					if draw.IntN(10) == 0 {
						if _, err := f.store.Append(context.Background(), f.lab, r.ID, []run.Record{withBlock(f.trial(8+n, n), "\x00")}); err != nil && !errors.Is(err, store.ErrInvalid) && !errors.Is(err, store.ErrConflict) {
							t.Errorf("a record that cannot be stored: %v", err)
						}
					}
					if _, err := f.store.Append(context.Background(), f.lab, r.ID, []run.Record{f.trial(7+n, n)}); err != nil {
						t.Error(err)
					}
				}
			})
		}
		t.Cleanup(func() {
			if got := len(f.stored(r.ID)); got != 6+trials {
				t.Errorf("%d records of a run, want %d", got, 6+trials)
			}
		})
	}
	wait.Wait()
}

// A run that ends gets its outcome and, completed, one code for good.
func TestAppendEnds(t *testing.T) {
	t.Parallel()
	f := setup(t)
	r := f.begin()
	records := append(f.records(1), f.debrief(8))
	first := f.append(r.ID, 8, records...)
	if first.Outcome != store.OutcomeCompleted || len(first.CompletionCode) != 9 {
		t.Errorf("acknowledged %+v", first)
	}
	if again := f.append(r.ID, 8, records...); again != first {
		t.Errorf("sent again it is %+v, first it was %+v", again, first)
	}
	r = f.begin()
	refusal := run.Record{Sequence: 2, Kind: run.KindRefusal, Bundle: f.bundle, Refusal: &run.Refusal{Step: "screening", Reason: "age"}}
	if ack := f.append(r.ID, 2, refusal); ack.Outcome != store.OutcomeRefused || ack.CompletionCode != "" {
		t.Errorf("acknowledged %+v", ack)
	}
}
