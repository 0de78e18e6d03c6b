package store

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/experiments/run"
	"distal/experiments/value"
)

// Acknowledged is the answer to an upload: everything up to Sequence is safely stored.
type Acknowledged struct {
	Sequence       int
	Outcome        string
	CompletionCode string
}

// appendRequest is one upload waiting for its commit.
type appendRequest struct {
	lab, run uuid.UUID
	records  []run.Record
	bodies   []string
	answer   chan appendAnswer
}

type appendAnswer struct {
	acknowledged Acknowledged
	err          error
}

// Append stores records of a run. Records that are already there are
// acknowledged again if they are the same and an error if they differ; those
// after a gap are left for the next time. It returns only after a synchronous
// commit, which many uploads share.
func (s *Store) Append(ctx context.Context, lab, id uuid.UUID, records []run.Record) (Acknowledged, error) {
	request := &appendRequest{lab: lab, run: id, records: slices.Clone(records), answer: make(chan appendAnswer, 1)}
	slices.SortStableFunc(request.records, func(a, b run.Record) int { return a.Sequence - b.Sequence })
	for i := range request.records {
		body, err := value.Canonical(request.records[i].Encode())
		if err != nil {
			return Acknowledged{}, &Error{Invalid, "record", fmt.Sprintf("record %d: %v", request.records[i].Sequence, err)}
		}
		request.bodies = append(request.bodies, string(body))
	}
	select {
	case s.queue <- request:
	case <-ctx.Done():
		return Acknowledged{}, ctx.Err()
	case <-s.done:
		return Acknowledged{}, ErrBusy
	}
	select {
	case answer := <-request.answer:
		return answer.acknowledged, answer.err
	case <-ctx.Done():
		return Acknowledged{}, ctx.Err()
	case <-s.done:
		return Acknowledged{}, ErrBusy
	}
}

// maxBatch is how many uploads share a commit at most.
const maxBatch = 256

// commitLoop collects uploads and commits them together.
func (s *Store) commitLoop(ctx context.Context) {
	defer close(s.done)
	for {
		var batch []*appendRequest
		select {
		case r := <-s.queue:
			batch = append(batch, r)
		case <-ctx.Done():
			return
		}
		timer := time.NewTimer(wait)
	collecting:
		for len(batch) < maxBatch {
			select {
			case r := <-s.queue:
				batch = append(batch, r)
			case <-timer.C:
				break collecting
			}
		}
		timer.Stop()
		s.commitByLab(batch)
	}
}

// commitByLab commits the uploads of each lab in a transaction of their own.
func (s *Store) commitByLab(batch []*appendRequest) {
	for len(batch) > 0 {
		lab := batch[0].lab
		var same, others []*appendRequest
		runs := map[uuid.UUID]bool{}
		for _, r := range batch {
			// Two uploads of one run go into different transactions, one after the other.
			if r.lab == lab && !runs[r.run] {
				same = append(same, r)
				runs[r.run] = true
			} else {
				others = append(others, r)
			}
		}
		s.commitTogether(lab, same)
		batch = others
	}
}

// commitTogether tries all at once; if the database refuses, each half by
// itself, so that one bad upload harms no other and costs few commits.
func (s *Store) commitTogether(lab uuid.UUID, requests []*appendRequest) {
	ctx, cancel := context.WithTimeout(context.Background(), 30*time.Second)
	defer cancel()
	answers := make([]appendAnswer, len(requests))
	err := s.InLab(ctx, lab, func(tx pgx.Tx) error { return appendAll(ctx, tx, lab, requests, answers) })
	if err != nil && len(requests) > 1 && !errors.Is(err, ErrBusy) {
		half := len(requests) / 2
		s.commitTogether(lab, requests[:half])
		s.commitTogether(lab, requests[half:])
		return
	}
	for i, r := range requests {
		if err != nil {
			answers[i] = appendAnswer{err: err}
		}
		r.answer <- answers[i]
	}
}

// state is what the database knows of a run that gets records.
type state struct {
	ID             uuid.UUID `db:"run_id"`
	Study          uuid.UUID `db:"study_id"`
	Bundle         string    `db:"bundle_digest"`
	Stage          int       `db:"stage"`
	Sequence       int       `db:"sequence"`
	Trials         int       `db:"trials"`
	Outcome        string    `db:"outcome"`
	CompletionCode string    `db:"completion_code"`
}

// rows collects the new rows of a batch, column by column.
type rows struct {
	run                        []uuid.UUID
	sequence                   []int32
	kind, body                 []string
	trialRun                   []uuid.UUID
	trialSequence, trial       []int32
	block, condition           []string
	practice, isCatch          []bool
	level, rt, onset, jitter   []*float64
	refresh                    []float64
	response                   []*string
	correct                    []*bool
	frames, dropped            []int32
	steps, digest, interrupted []string
}

func appendAll(ctx context.Context, tx pgx.Tx, lab uuid.UUID, requests []*appendRequest, answers []appendAnswer) error {
	ids := make([]uuid.UUID, len(requests))
	for i, r := range requests {
		ids[i] = r.run
	}
	states, err := collect[state](ctx, tx, `
		SELECT run_id, study_id, bundle_digest, stage, sequence, trials, COALESCE(outcome, '') AS outcome, COALESCE(completion_code, '') AS completion_code
		FROM runs WHERE run_id = ANY(@ids) ORDER BY run_id FOR UPDATE`, pgx.NamedArgs{"ids": ids})
	if err != nil {
		return err
	}
	byRun := map[uuid.UUID]*state{}
	for i := range states {
		byRun[states[i].ID] = &states[i]
	}
	stored, err := findStored(ctx, tx, byRun, requests)
	if err != nil {
		return err
	}
	var fresh rows
	var changed []*state
	studies := map[uuid.UUID]bool{}
	for i, r := range requests {
		st := byRun[r.run]
		if st == nil {
			answers[i].err = ErrNotFound
			continue
		}
		before := st.Sequence
		if err := take(st, r, stored, &fresh); err != nil {
			answers[i].err = err
			if st.Sequence == before {
				continue
			}
		}
		if st.Sequence > before {
			changed = append(changed, st)
			studies[st.Study] = true
		}
		answers[i].acknowledged = Acknowledged{st.Sequence, st.Outcome, st.CompletionCode}
	}
	if len(changed) == 0 {
		return nil
	}
	return write(ctx, tx, lab, &fresh, changed, studies)
}

// recordKey names a record.
type recordKey struct {
	run      uuid.UUID
	sequence int
}

// findStored reads what is stored of the records that came again.
func findStored(ctx context.Context, tx pgx.Tx, byRun map[uuid.UUID]*state, requests []*appendRequest) (map[recordKey]string, error) {
	var ids []uuid.UUID
	var sequences []int32
	for _, r := range requests {
		st := byRun[r.run]
		for i := range r.records {
			if st != nil && r.records[i].Sequence <= st.Sequence {
				ids, sequences = append(ids, r.run), append(sequences, int32(r.records[i].Sequence))
			}
		}
	}
	if len(ids) == 0 {
		return nil, nil
	}
	found, err := tx.Query(ctx, `
		SELECT r.run_id, r.sequence, r.body
		FROM records r JOIN unnest($1::uuid[], $2::integer[]) AS u (run_id, sequence) USING (run_id, sequence)`, ids, sequences)
	if err != nil {
		return nil, err
	}
	stored := map[recordKey]string{}
	var key recordKey
	var body string
	_, err = pgx.ForEachRow(found, []any{&key.run, &key.sequence, &body}, func() error {
		stored[key] = body
		return nil
	})
	return stored, err
}

// take accepts the records of an upload that follow on what is stored.
func take(st *state, r *appendRequest, stored map[recordKey]string, fresh *rows) error {
	for i := range r.records {
		rec := &r.records[i]
		switch {
		case rec.Sequence <= st.Sequence:
			if err := st.compare(rec, r.bodies[i], stored); err != nil {
				return err
			}
			continue
		case rec.Sequence > st.Sequence+1:
			return nil // a gap: the rest is sent again
		}
		if err := st.accept(rec); err != nil {
			return err
		}
		fresh.add(st.ID, rec, r.bodies[i])
	}
	return nil
}

// compare finds out whether a record that came again is the same. A record of
// this very upload is not stored yet.
func (st *state) compare(rec *run.Record, body string, stored map[recordKey]string) error {
	if st.Outcome == OutcomeWithdrawn {
		return nil // deleted: nothing to compare with, and nothing to keep
	}
	before, found := stored[recordKey{st.ID, rec.Sequence}]
	switch {
	case !found:
		return &Error{Invalid, "twice", fmt.Sprintf("record %d stands twice in one upload", rec.Sequence)}
	case before != body:
		return &Error{Conflict, "other_record", fmt.Sprintf("record %d is stored with another content", rec.Sequence)}
	}
	return nil
}

// stageOf ranks the kinds of records in the order of a run.
func stageOf(k run.Kind) int {
	switch k {
	case run.KindConsent:
		return 1
	case run.KindScreening:
		return 2
	case run.KindCard:
		return 3
	case run.KindDistance:
		return 4
	case run.KindDisplayCheck:
		return 5
	case run.KindInstructions:
		return 6
	case run.KindTrial, run.KindBreak:
		return 7
	case run.KindAnswers:
		return 8
	case run.KindDebrief:
		return 9
	}
	return 0 // events and refusals come at any time after consent
}

// accept checks that a record can follow and advances the state.
func (st *state) accept(rec *run.Record) error {
	stage := stageOf(rec.Kind)
	switch {
	case st.Outcome != "":
		return &Error{Conflict, "ended", "the run has ended: " + st.Outcome}
	case rec.Bundle != st.Bundle:
		return &Error{Conflict, "other_bundle", fmt.Sprintf("record %d was made under another bundle", rec.Sequence)}
	case rec.Kind == run.KindConsent || rec.Kind == run.KindWithdrawal:
		return &Error{Conflict, "order", "a " + run.KindNames[rec.Kind] + " record cannot be sent here"}
	// Questions are optional, so debrief may follow trials.
	case stage > st.Stage+1 && !(rec.Kind == run.KindDebrief && st.Stage == 7):
		return &Error{Conflict, "order", fmt.Sprintf("record %d (%s) comes before the steps that lead to it", rec.Sequence, run.KindNames[rec.Kind])}
	}
	st.Stage = max(st.Stage, stage)
	st.Sequence = rec.Sequence
	switch rec.Kind {
	case run.KindTrial:
		st.Trials++
	case run.KindRefusal:
		st.Outcome = OutcomeRefused
	case run.KindDebrief:
		st.Outcome = OutcomeCompleted
		st.CompletionCode = completionCode()
	}
	return nil
}

// completionCode is short enough to type and long enough not to be guessed (40 bits).
func completionCode() string {
	const letters = "ABCDEFGHJKLMNPQRSTUVWXYZ23456789"
	var b [8]byte
	rand.Read(b[:])
	for i := range b {
		b[i] = letters[b[i]%32]
	}
	return string(b[:4]) + "-" + string(b[4:])
}

func (f *rows) add(id uuid.UUID, rec *run.Record, body string) {
	f.run = append(f.run, id)
	f.sequence = append(f.sequence, int32(rec.Sequence))
	f.kind = append(f.kind, run.KindNames[rec.Kind])
	f.body = append(f.body, body)
	t := rec.Trial
	if t == nil {
		return
	}
	f.trialRun = append(f.trialRun, id)
	f.trialSequence = append(f.trialSequence, int32(rec.Sequence))
	f.trial = append(f.trial, int32(t.Trial))
	f.block, f.condition = append(f.block, t.Block), append(f.condition, t.Condition)
	f.practice, f.isCatch = append(f.practice, t.Practice), append(f.isCatch, t.Catch)
	f.level, f.rt = append(f.level, nullable(t.Level)), append(f.rt, nullable(t.ResponseMs))
	f.onset, f.jitter = append(f.onset, nullable(t.OnsetMs)), append(f.jitter, nullable(t.JitterMs))
	f.refresh = append(f.refresh, t.RefreshMs)
	var response *string
	if t.Response != "" {
		response = &t.Response
	}
	var correct *bool
	if t.Correct >= 0 {
		right := t.Correct == 1
		correct = &right
	}
	f.response, f.correct = append(f.response, response), append(f.correct, correct)
	f.frames, f.dropped = append(f.frames, int32(t.StimulusSteps)), append(f.dropped, int32(t.Dropped))
	f.steps, f.digest, f.interrupted = append(f.steps, run.EncodeSteps(t.Steps)), append(f.digest, t.Digest), append(f.interrupted, t.Interrupted)
}

func nullable(x float64) *float64 {
	if math.IsNaN(x) {
		return nil
	}
	return &x
}

// write stores a batch with one statement a table.
func write(ctx context.Context, tx pgx.Tx, lab uuid.UUID, f *rows, changed []*state, studies map[uuid.UUID]bool) error {
	batch := &pgx.Batch{}
	batch.Queue(`INSERT INTO records (lab_id, run_id, sequence, kind, body)
		SELECT $1, * FROM unnest($2::uuid[], $3::integer[], $4::text[], $5::text[])`, lab, f.run, f.sequence, f.kind, f.body)
	if len(f.trialRun) > 0 {
		batch.Queue(`INSERT INTO trials (lab_id, run_id, sequence, trial, block, condition, practice, is_catch, level, response, correct,
				rt_ms, onset_ms, refresh_ms, stimulus_frames, frame_steps, dropped_frames, jitter_ms, digest, interrupted)
			SELECT $1, * FROM unnest($2::uuid[], $3::integer[], $4::integer[], $5::text[], $6::text[], $7::boolean[], $8::boolean[],
				$9::float8[], $10::text[], $11::boolean[], $12::float8[], $13::float8[], $14::float8[], $15::integer[], $16::text[],
				$17::integer[], $18::float8[], $19::text[], $20::text[])`,
			lab, f.trialRun, f.trialSequence, f.trial, f.block, f.condition, f.practice, f.isCatch, f.level, f.response, f.correct,
			f.rt, f.onset, f.refresh, f.frames, f.steps, f.dropped, f.jitter, f.digest, f.interrupted)
	}
	var ids []uuid.UUID
	var stage, sequence, trials []int32
	var outcome, code []string
	for _, st := range changed {
		ids = append(ids, st.ID)
		stage, sequence, trials = append(stage, int32(st.Stage)), append(sequence, int32(st.Sequence)), append(trials, int32(st.Trials))
		outcome, code = append(outcome, st.Outcome), append(code, st.CompletionCode)
	}
	batch.Queue(`UPDATE runs r SET stage = u.stage, sequence = u.sequence, trials = u.trials, outcome = NULLIF(u.outcome, ''),
			completion_code = NULLIF(u.code, ''), updated_at = now(), finished_at = CASE WHEN u.outcome <> '' THEN now() END
		FROM unnest($1::uuid[], $2::integer[], $3::integer[], $4::integer[], $5::text[], $6::text[]) AS u (id, stage, sequence, trials, outcome, code)
		WHERE r.run_id = u.id`, ids, stage, sequence, trials, outcome, code)
	for id := range studies {
		batch.Queue(`SELECT pg_notify('distal_study', $1)`, id.String())
	}
	return tx.SendBatch(ctx, batch).Close()
}
