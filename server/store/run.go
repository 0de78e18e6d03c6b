package store

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

// Run is one participant's pass through a bundle.
type Run struct {
	ID             uuid.UUID  `db:"run_id"`
	Study          uuid.UUID  `db:"study_id"`
	Bundle         string     `db:"bundle_digest"`
	Seed           string     `db:"seed"` // 16 hexadecimal digits
	Group          int        `db:"group_index"`
	Order          int        `db:"order_index"`
	Simulated      bool       `db:"simulated"`
	Stage          int        `db:"stage"`
	Sequence       int        `db:"sequence"`
	Trials         int        `db:"trials"`
	Outcome        string     `db:"outcome"`
	CompletionCode string     `db:"completion_code"`
	Browser        string     `db:"browser"`
	StartedAt      time.Time  `db:"started_at"`
	UpdatedAt      time.Time  `db:"updated_at"`
	FinishedAt     *time.Time `db:"finished_at"`
	Excluded       bool       `db:"excluded"`
}

const runColumns = `SELECT r.run_id, r.study_id, r.bundle_digest, r.seed, r.group_index, r.order_index, r.simulated, r.stage, r.sequence, r.trials,
	COALESCE(r.outcome, '') AS outcome, COALESCE(r.completion_code, '') AS completion_code, r.browser, r.started_at, r.updated_at, r.finished_at,
	` + excludedNow + ` AS excluded FROM runs r`

// NewRun is what a run begins with.
type NewRun struct {
	Study          uuid.UUID
	Invitation     uuid.UUID // Nil: by the public link
	ParticipantKey string    // digest of the device marker
	CreationKey    string    // made on the device; asking twice gives the same run
	Browser        string
	Simulated      bool
	Seed           string // "" to draw one
}

// Outcomes of runs.
const (
	OutcomeCompleted = "completed"
	OutcomeRefused   = "refused"
	OutcomeWithdrawn = "withdrawn"
)

// CreateRun begins a run together with its consent: without one there is no
// run. Group and order are allocated in turn, by weight, under a lock on the study.
func (s *Store) CreateRun(ctx context.Context, lab uuid.UUID, n NewRun, st *study.Study, consent run.Record) (created Run, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		existing, err := collect[Run](ctx, tx, runColumns+` WHERE r.creation_key = @key`, pgx.NamedArgs{"key": n.CreationKey})
		if err != nil {
			return err
		}
		if len(existing) == 1 {
			created = existing[0]
			return nil
		}
		var state, bundleDigest string
		var quota, order int
		if err := tx.QueryRow(ctx, `SELECT state, quota, next_order, COALESCE(bundle_digest, '') FROM studies WHERE study_id = $1 FOR UPDATE`, n.Study).
			Scan(&state, &quota, &order, &bundleDigest); err != nil {
			return err
		}
		if !n.Simulated {
			if err := admit(ctx, tx, n, state, quota); err != nil {
				return err
			}
		}
		if consent.Bundle != bundleDigest {
			return &Error{Conflict, "other_bundle", "the study has changed meanwhile: load the page again"}
		}
		created = Run{
			ID: NewID(), Study: n.Study, Bundle: bundleDigest, Seed: n.Seed, Group: groupOf(st, order), Order: order,
			Simulated: n.Simulated, Browser: n.Browser, Stage: stageOf(run.KindConsent), Sequence: 1,
		}
		if created.Seed == "" {
			created.Seed = drawSeed()
		}
		return insertRun(ctx, tx, lab, n, created, consent)
	})
	return created, err
}

// admit refuses runs of studies that are not open or full, and second runs.
func admit(ctx context.Context, tx pgx.Tx, n NewRun, state string, quota int) error {
	switch state {
	case StatePaused:
		return &Error{Conflict, "paused", "the study is paused at the moment"}
	case StateClosed, StateDraft:
		return &Error{Conflict, "closed", "the study has ended"}
	}
	if quota > 0 {
		// Counted: completed and not excluded, and those under way in the last two hours.
		var taken int
		if err := tx.QueryRow(ctx, `SELECT count(*) FROM runs r WHERE r.study_id = $1 AND NOT r.simulated AND (
			r.outcome = 'completed' AND NOT `+excludedNow+` OR r.outcome IS NULL AND r.updated_at > now() - interval '2 hours')`, n.Study).Scan(&taken); err != nil {
			return err
		}
		if taken >= quota {
			return &Error{Conflict, "full", "the study has all the participants that it needs"}
		}
	}
	return nil
}

func insertRun(ctx context.Context, tx pgx.Tx, lab uuid.UUID, n NewRun, r Run, consent run.Record) error {
	var invitation *uuid.UUID
	if n.Invitation != uuid.Nil {
		invitation = &n.Invitation
	}
	var participant *string
	if n.ParticipantKey != "" && n.Invitation == uuid.Nil {
		participant = &n.ParticipantKey
	}
	if _, err := tx.Exec(ctx, `INSERT INTO runs (lab_id, run_id, study_id, bundle_digest, invitation_id, participant_key, creation_key, seed,
			group_index, order_index, simulated, stage, sequence, browser) VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11, $12, 1, $13)`,
		lab, r.ID, r.Study, r.Bundle, invitation, participant, n.CreationKey, r.Seed, r.Group, r.Order, r.Simulated, r.Stage, r.Browser); err != nil {
		return err
	}
	body, err := value.Canonical(consent.Encode())
	if err != nil {
		return err
	}
	if _, err := tx.Exec(ctx, `INSERT INTO records (lab_id, run_id, sequence, kind, body) VALUES ($1, $2, 1, 'consent', $3)`, lab, r.ID, string(body)); err != nil {
		return err
	}
	c := consent.Consent
	if _, err := tx.Exec(ctx, `INSERT INTO consents (lab_id, run_id, text_digest, text_version, language) VALUES ($1, $2, $3, $4, $5)`,
		lab, r.ID, c.TextDigest, c.Version, c.Language); err != nil {
		return err
	}
	if _, err := tx.Exec(ctx, `UPDATE studies SET next_order = next_order + 1 WHERE study_id = $1`, r.Study); err != nil {
		return err
	}
	return notify(ctx, tx, r.Study)
}

func notify(ctx context.Context, tx pgx.Tx, study uuid.UUID) error {
	_, err := tx.Exec(ctx, `SELECT pg_notify('distal_study', $1)`, study.String())
	return err
}

// groupOf deals groups in turn by their weights.
func groupOf(st *study.Study, order int) int {
	total := 0
	for i := range st.Groups {
		total += st.Groups[i].Weight
	}
	if total == 0 {
		return 0
	}
	k := order % total
	for i := range st.Groups {
		if k < st.Groups[i].Weight {
			return i
		}
		k -= st.Groups[i].Weight
	}
	return 0
}

func drawSeed() string {
	var b [8]byte
	rand.Read(b[:])
	return hex.EncodeToString(b[:])
}

// FindRun finds a run.
func (s *Store) FindRun(ctx context.Context, lab, id uuid.UUID) (r Run, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		r, err = one[Run](ctx, tx, runColumns+` WHERE r.run_id = @id`, pgx.NamedArgs{"id": id})
		return err
	})
	return r, err
}

// FindRuns lists a study's runs, newest first.
func (s *Store) FindRuns(ctx context.Context, lab, study uuid.UUID) (list []Run, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Run](ctx, tx, runColumns+` WHERE r.study_id = @study ORDER BY r.started_at DESC, r.run_id`, pgx.NamedArgs{"study": study})
		return err
	})
	return list, err
}

// TakenPart tells whether a device has a run in the study, and its outcome.
func (s *Store) TakenPart(ctx context.Context, lab, study uuid.UUID, participantKey string) (taken bool, outcome string, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		err := tx.QueryRow(ctx, `SELECT COALESCE(outcome, '') FROM runs WHERE study_id = $1 AND participant_key = $2 AND NOT simulated`, study, participantKey).Scan(&outcome)
		if err == pgx.ErrNoRows {
			return nil
		}
		taken = err == nil
		return err
	})
	return taken, outcome, err
}

// FindRecords gives a run's records in order.
func (s *Store) FindRecords(ctx context.Context, lab, id uuid.UUID) (records []run.Record, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		rows, err := tx.Query(ctx, `SELECT body FROM records WHERE run_id = $1 ORDER BY sequence`, id)
		if err != nil {
			return err
		}
		bodies, err := pgx.CollectRows(rows, pgx.RowTo[string])
		if err != nil {
			return err
		}
		for _, body := range bodies {
			r, err := decode(body)
			if err != nil {
				return err
			}
			records = append(records, *r)
		}
		return nil
	})
	return records, err
}

func decode(body string) (*run.Record, error) {
	tree, err := value.ParseJSON([]byte(body))
	if err != nil {
		return nil, err
	}
	return run.DecodeRecord(tree)
}

// Withdraw deletes what the participant gave and keeps that it took place.
func (s *Store) Withdraw(ctx context.Context, lab, id uuid.UUID) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		var study uuid.UUID
		var outcome string
		if err := tx.QueryRow(ctx, `SELECT study_id, COALESCE(outcome, '') FROM runs WHERE run_id = $1 FOR UPDATE`, id).Scan(&study, &outcome); err != nil {
			return err
		}
		if outcome == OutcomeWithdrawn {
			return nil
		}
		if _, err := tx.Exec(ctx, `SELECT set_config('distal.withdrawal', $1, true)`, id.String()); err != nil {
			return err
		}
		deleted := int64(0)
		for _, table := range []string{"trials", "consents", "exclusions", "records"} {
			tag, err := tx.Exec(ctx, `DELETE FROM `+table+` WHERE run_id = $1`, id)
			if err != nil {
				return err
			}
			if table == "records" {
				deleted = tag.RowsAffected()
			}
		}
		if _, err := tx.Exec(ctx, `INSERT INTO withdrawals (lab_id, run_id, study_id, records_deleted) VALUES ($1, $2, $3, $4)`, lab, id, study, deleted); err != nil {
			return err
		}
		if _, err := tx.Exec(ctx, `UPDATE runs SET outcome = 'withdrawn', participant_key = NULL, completion_code = NULL, browser = '',
			trials = 0, finished_at = now(), updated_at = now() WHERE run_id = $1`, id); err != nil {
			return err
		}
		if err := enter(ctx, tx, lab, uuid.Nil, "run withdrawn", id.String(), map[string]any{"records_deleted": deleted}); err != nil {
			return err
		}
		return notify(ctx, tx, study)
	})
}

// Exclusion is a decision about a run.
type Exclusion struct {
	Run       uuid.UUID `db:"run_id"`
	Excluded  bool      `db:"excluded"`
	Rule      string    `db:"rule"` // "" for a person's decision
	Reason    string    `db:"reason"`
	Person    string    `db:"person"` // name
	DecidedAt time.Time `db:"decided_at"`
}

// Exclude records a decision about a run: by a person (rule "") or by a rule of
// the study (actor Nil). A rule's unchanged decision is not recorded again.
func (s *Store) Exclude(ctx context.Context, lab, actor, id uuid.UUID, rule string, excluded bool, reason string) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		var study uuid.UUID
		if err := tx.QueryRow(ctx, `SELECT study_id FROM runs WHERE run_id = $1 AND outcome IS DISTINCT FROM 'withdrawn' FOR UPDATE`, id).Scan(&study); err != nil {
			return err
		}
		if rule != "" {
			var before bool
			err := tx.QueryRow(ctx, `SELECT excluded FROM exclusions WHERE run_id = $1 AND rule = $2 ORDER BY number DESC LIMIT 1`, id, rule).Scan(&before)
			if err == nil && before == excluded || err == pgx.ErrNoRows && !excluded {
				return nil
			}
			if err != nil && err != pgx.ErrNoRows {
				return err
			}
		}
		var person *uuid.UUID
		if actor != uuid.Nil {
			person = &actor
		}
		if _, err := tx.Exec(ctx, `INSERT INTO exclusions (lab_id, run_id, excluded, rule, reason, person_id) VALUES ($1, $2, $3, $4, $5, $6)`,
			lab, id, excluded, rule, reason, person); err != nil {
			return err
		}
		action := "run excluded"
		if !excluded {
			action = "run included again"
		}
		if err := enter(ctx, tx, lab, actor, action, id.String(), map[string]any{"rule": rule, "reason": reason}); err != nil {
			return err
		}
		return notify(ctx, tx, study)
	})
}

// FindExclusions lists the decisions about a study's runs, oldest first.
func (s *Store) FindExclusions(ctx context.Context, lab, study uuid.UUID) (list []Exclusion, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Exclusion](ctx, tx, `
			SELECT e.run_id, e.excluded, e.rule, e.reason, COALESCE(p.name, '') AS person, e.decided_at
			FROM exclusions e JOIN runs r ON r.lab_id = e.lab_id AND r.run_id = e.run_id
			LEFT JOIN people p ON p.lab_id = e.lab_id AND p.person_id = e.person_id
			WHERE r.study_id = @study ORDER BY e.number`, pgx.NamedArgs{"study": study})
		return err
	})
	return list, err
}

// Listen calls changed with the identifier of every study that gets new data,
// until ctx ends.
func (s *Store) Listen(ctx context.Context, changed func(study uuid.UUID)) error {
	conn, err := s.pool.Acquire(ctx)
	if err != nil {
		return err
	}
	defer conn.Release()
	if _, err := conn.Exec(ctx, `LISTEN distal_study`); err != nil {
		return err
	}
	for {
		n, err := conn.Conn().WaitForNotification(ctx)
		if err != nil {
			return err
		}
		if id, err := uuid.Parse(n.Payload); err == nil {
			changed(id)
		}
	}
}
