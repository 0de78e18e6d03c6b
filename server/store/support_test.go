package store_test

import (
	"context"
	"fmt"
	"math"
	"testing"

	"github.com/google/uuid"

	"distal/experiments/library"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/bundle"
	"distal/server/postgres"
	"distal/server/store"
	"distal/web"
)

// fixture is a store with one lab, one person and one open study.
type fixture struct {
	testing.TB
	store         *store.Store
	owner, server string // addresses of the database
	lab, person   uuid.UUID
	study         uuid.UUID
	spec          *study.Study
	bundle        string
}

// setup makes a fixture in a database of its own.
func setup(t testing.TB) *fixture {
	t.Helper()
	owner, server := postgres.TestDatabase(t)
	return setupAt(t, owner, server)
}

func setupAt(t testing.TB, owner, server string) *fixture {
	t.Helper()
	s, err := store.Open(context.Background(), server)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	f := &fixture{TB: t, store: s, owner: owner, server: server}
	f.lab, f.person = f.makeLab("Motion Lab")
	f.study = f.launch(f.lab, f.person, 0)
	return f
}

func (f *fixture) makeLab(name string) (lab, person uuid.UUID) {
	f.Helper()
	ctx := context.Background()
	lab, err := f.store.CreateLab(ctx, name, func(b []byte) ([]byte, error) { return b, nil })
	if err != nil {
		f.Fatal(err)
	}
	person, err = f.store.CreatePerson(ctx, lab, uuid.Nil, store.Person{Name: "Ines Example", Email: "ines@lab.example", Role: store.RoleAdmin})
	if err != nil {
		f.Fatal(err)
	}
	return lab, person
}

// launch opens a study of the library with a quota.
func (f *fixture) launch(lab, person uuid.UUID, quota int) uuid.UUID {
	f.Helper()
	st, problems := library.Read("motion-coherence")
	if problems.Failed() {
		f.Fatal(problems)
	}
	st.Quota.Runs = quota
	digests := map[string]string{}
	var assets []web.Asset
	for _, name := range []string{bundle.AssetEngine, bundle.AssetScript, bundle.AssetStyle} {
		digests[name] = bundle.Digest([]byte(name))
		assets = append(assets, web.Asset{Digest: digests[name], MediaType: "text/plain", Plain: []byte(name), Compressed: []byte(name)})
	}
	b, err := bundle.Assemble(st, digests)
	if err != nil {
		f.Fatal(err)
	}
	link := "study-" + uuid.NewString()[:8]
	id, err := f.store.LaunchStudy(context.Background(), lab, person, link, b, bundle.Signed{Signature: "signature"}, assets)
	if err != nil {
		f.Fatal(err)
	}
	f.spec, f.bundle = st, b.Digest
	return id
}

// newRun is a run of the fixture's study by a device of its own.
func (f *fixture) newRun() store.NewRun {
	return store.NewRun{Study: f.study, ParticipantKey: uuid.NewString(), CreationKey: uuid.NewString()}
}

// begin creates a run with its consent.
func (f *fixture) begin() store.Run {
	f.Helper()
	r, err := f.store.CreateRun(context.Background(), f.lab, f.newRun(), f.spec, f.consent())
	if err != nil {
		f.Fatal(err)
	}
	return r
}

func (f *fixture) consent() run.Record {
	text := &f.spec.Texts[0]
	return run.Record{Sequence: 1, Kind: run.KindConsent, AtMs: 1, Bundle: f.bundle, Consent: &run.Consent{
		TextDigest: run.ConsentDigest(text), Version: text.Version, Language: text.Language, Items: len(study.Statements(text.Consent)),
	}}
}

// preparation is what comes between consent and the first trial: records 2 to 6.
func (f *fixture) preparation() []run.Record {
	records := []run.Record{
		{Kind: run.KindScreening, Screening: &run.Screening{CautionsRead: true, AgeYears: 30}},
		{Kind: run.KindCard, Card: &run.Card{PxPerMm: 3.6, PixelRatio: 1}},
		{Kind: run.KindDistance, Distance: &run.Distance{Method: "stated", DistanceMm: 570}},
		{Kind: run.KindDisplayCheck, Check: &run.DisplayCheck{RefreshMs: 16.67, WidthDeg: 50, HeightDeg: 30, PixelRatio: 1}},
		{Kind: run.KindInstructions},
	}
	for i := range records {
		records[i].Sequence, records[i].AtMs, records[i].Bundle = i+2, float64(i), f.bundle
	}
	return records
}

// trial is a plausible trial of 36 frames.
func (f *fixture) trial(sequence, number int) run.Record {
	intervals := make([]float64, 36)
	steps := make([]int, len(intervals))
	for i := range intervals {
		intervals[i], steps[i] = 16.67, 1
	}
	return run.Record{Sequence: sequence, Kind: run.KindTrial, AtMs: 1000 * float64(number), Bundle: f.bundle, Trial: &run.TrialRecord{
		Block: "measure", Trial: number, Track: 0, Task: "direction", Display: "field", Keys: []string{"coherence"}, Values: []float64{0.25},
		Level: 0.25, Response: "left", Correct: 1, ResponseMs: 612.5, Input: "keyboard", OnsetMs: 1000.25, OffsetMs: 1600.5,
		RefreshMs: 16.67, FixationSteps: 30, StimulusSteps: 36, Steps: steps, IntervalsMs: intervals, JitterMs: 0.12,
		Digest: fmt.Sprintf("%016x", number),
	}}
}

// records are a run's records 2 to 6 and n trials, without the consent.
func (f *fixture) records(trials int) []run.Record {
	records := f.preparation()
	for i := range trials {
		records = append(records, f.trial(7+i, i))
	}
	return records
}

func (f *fixture) debrief(sequence int) run.Record {
	return run.Record{Sequence: sequence, Kind: run.KindDebrief, AtMs: 1, Bundle: f.bundle}
}

// append uploads records and expects them to be acknowledged up to want.
func (f *fixture) append(id uuid.UUID, want int, records ...run.Record) store.Acknowledged {
	f.Helper()
	ack, err := f.store.Append(context.Background(), f.lab, id, records)
	if err != nil {
		f.Fatal(err)
	}
	if ack.Sequence != want {
		f.Fatalf("acknowledged up to %d, want %d", ack.Sequence, want)
	}
	return ack
}

// complete makes a completed run.
func (f *fixture) complete() store.Run {
	f.Helper()
	r := f.begin()
	records := append(f.records(1), f.debrief(8))
	f.append(r.ID, 8, records...)
	return r
}

// stored gives the run's records as they are in the database.
func (f *fixture) stored(id uuid.UUID) []run.Record {
	f.Helper()
	records, err := f.store.FindRecords(context.Background(), f.lab, id)
	if err != nil {
		f.Fatal(err)
	}
	return records
}

func nan() float64 { return math.NaN() }
