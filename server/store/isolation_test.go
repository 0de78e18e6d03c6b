package store_test

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"testing"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"
	"github.com/jackc/pgx/v5/pgconn"

	"distal/server/store"
)

// tables are all tables that hold data.
var tables = []string{"labs", "people", "spent_tokens", "keys", "assets", "studies", "bundles", "invitations", "runs",
	"records", "consents", "trials", "exclusions", "withdrawals", "ledger"}

// fill leaves at least one row of the fixture's lab in every table.
func fill(f *fixture) {
	f.Helper()
	ctx := context.Background()
	if _, err := f.store.CreateInvitations(ctx, f.lab, f.person, f.study, "autumn", 1); err != nil {
		f.Fatal(err)
	}
	if err := f.store.SpendToken(ctx, f.lab, "token", "used", farAway); err != nil {
		f.Fatal(err)
	}
	kept := f.complete()
	if err := f.store.Exclude(ctx, f.lab, f.person, kept.ID, "", true, "slept"); err != nil {
		f.Fatal(err)
	}
	if err := f.store.Withdraw(ctx, f.lab, f.complete().ID); err != nil {
		f.Fatal(err)
	}
}

// No query of one lab sees another's rows, even without a WHERE, and none
// changes, deletes or adds any.
func TestLabsAreSeparate(t *testing.T) {
	t.Parallel()
	ctx := context.Background()
	f := setup(t)
	other := &fixture{TB: t, store: f.store, owner: f.owner}
	other.lab, other.person = other.makeLab("Other Lab")
	other.study = other.launch(other.lab, other.person, 0)
	fill(f)
	fill(other)
	owned := counts(t, f.owner)
	for _, table := range tables {
		own, foreign := 0, 0
		err := f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
			return tx.QueryRow(ctx, `SELECT count(*) FILTER (WHERE lab_id = $1), count(*) FILTER (WHERE lab_id <> $1) FROM `+table, f.lab).Scan(&own, &foreign)
		})
		if err != nil || own == 0 || foreign != 0 {
			t.Errorf("table %s: %d own rows, %d of others (%v); want some and none", table, own, foreign, err)
		}
		if all := owned[table]; all <= own {
			t.Errorf("table %s: %d rows in all, %d seen: the test shows nothing", table, all, own)
		}
	}
	// As many rows are touched as the own lab has.
	for _, statement := range []string{`UPDATE runs SET browser = 'x'`, `UPDATE studies SET title = 'x'`, `UPDATE people SET name = 'x'`, `DELETE FROM spent_tokens`} {
		err := f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
			_, err := tx.Exec(ctx, statement)
			return err
		})
		if err != nil {
			t.Errorf("%s: %v", statement, err)
		}
	}
	err := f.store.InLab(ctx, other.lab, func(tx pgx.Tx) error {
		var changed, spent int
		err := tx.QueryRow(ctx, `SELECT (SELECT count(*) FROM runs WHERE browser = 'x') + (SELECT count(*) FROM studies WHERE title = 'x')
			+ (SELECT count(*) FROM people WHERE name = 'x'), (SELECT count(*) FROM spent_tokens)`).Scan(&changed, &spent)
		if changed != 0 || spent != 1 {
			t.Errorf("%d rows of the other lab were changed, %d of its tokens are left; want 0 and 1", changed, spent)
		}
		return err
	})
	if err != nil {
		t.Error(err)
	}
	err = f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
		_, err := tx.Exec(ctx, `INSERT INTO people (lab_id, person_id, name, email, role) VALUES ($1, $2, 'Eve', 'eve@lab.example', 'admin')`, other.lab, uuid.New())
		return err
	})
	if !errors.Is(err, store.ErrForbidden) {
		t.Errorf("a row added to another lab: %v, want forbidden", err)
	}
}

// counts gives the rows of each table as the superuser sees them.
func counts(t *testing.T, owner string) map[string]int {
	t.Helper()
	conn := connect(t, owner)
	n := map[string]int{}
	for _, table := range tables {
		var k int
		if err := conn.QueryRow(context.Background(), `SELECT count(*) FROM `+table).Scan(&k); err != nil {
			t.Fatal(err)
		}
		n[table] = k
	}
	return n
}

func connect(t *testing.T, address string) *pgx.Conn {
	t.Helper()
	conn, err := pgx.Connect(context.Background(), address)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { conn.Close(context.Background()) })
	return conn
}

// Without a lab named, and for the lab of the last transaction, nothing is shown.
func TestNoLabNoRows(t *testing.T) {
	t.Parallel()
	f := setup(t)
	f.begin()
	conn := connect(t, f.server)
	ctx := context.Background()
	for _, step := range []string{"at first", "after a transaction in a lab"} {
		for _, table := range tables {
			var n int
			err := conn.QueryRow(ctx, `SELECT count(*) FROM `+table).Scan(&n)
			if err == nil {
				t.Errorf("%s: %d rows of %s without a lab, want an error", step, n, table)
			}
		}
		tx, err := conn.Begin(ctx)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := tx.Exec(ctx, `SELECT set_config('distal.lab_id', $1, true)`, f.lab.String()); err != nil {
			t.Fatal(err)
		}
		var n int
		if err := tx.QueryRow(ctx, `SELECT count(*) FROM runs`).Scan(&n); err != nil || n != 1 {
			t.Errorf("%d runs, %v; want 1", n, err)
		}
		if err := tx.Commit(ctx); err != nil {
			t.Fatal(err)
		}
	}
}

// The server's role can neither pass by the rows' security nor change the schema.
func TestServerRoleIsWeak(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	conn := connect(t, f.server)
	var strong bool
	if err := conn.QueryRow(ctx, `SELECT rolsuper OR rolbypassrls OR rolcreaterole OR rolcreatedb OR rolreplication FROM pg_roles WHERE rolname = current_user`).Scan(&strong); err != nil || strong {
		t.Errorf("the server's role has rights that it should not have (%v)", err)
	}
	for _, statement := range []string{
		`ALTER TABLE records DISABLE ROW LEVEL SECURITY`, `ALTER TABLE records DISABLE TRIGGER records_append_only`, `DROP POLICY own_lab ON runs`,
		`TRUNCATE records`, `DROP TABLE trials`, `CREATE TABLE mine (x integer)`, `SET session_replication_role = replica`,
		`SELECT * FROM goose_db_version`, `SET ROLE distal_owner`, `COPY labs TO PROGRAM 'cat'`, `ALTER TABLE runs DISABLE TRIGGER ALL`,
	} {
		_, err := conn.Exec(ctx, statement)
		var pg *pgconn.PgError
		if !errors.As(err, &pg) || pg.Code != "42501" { // insufficient_privilege
			t.Errorf("%s: %v, want insufficient privilege", statement, err)
		}
	}
}

// A trial without a recorded consent is refused by the database itself.
func TestNoTrialWithoutConsent(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	const insertRun = `INSERT INTO runs (lab_id, run_id, study_id, bundle_digest, creation_key, seed, group_index, order_index, stage, sequence)
		SELECT lab_id, $1, study_id, bundle_digest, $2, '0123456789abcdef', 0, 0, 6, 6 FROM studies`
	const insertTrial = `INSERT INTO trials (lab_id, run_id, sequence, trial, block, condition, practice, is_catch, refresh_ms, stimulus_frames, frame_steps,
			dropped_frames, digest, interrupted) VALUES ($1, $2, 7, 0, 'b', '', false, false, 16, 1, '1', 0, 'd', '')`
	id := uuid.New()
	err := f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
		if _, err := tx.Exec(ctx, insertRun, id, uuid.NewString()); err != nil {
			return err
		}
		if _, err := tx.Exec(ctx, `INSERT INTO records (lab_id, run_id, sequence, kind, body) VALUES ($1, $2, 7, 'trial', '{}')`, f.lab, id); err != nil {
			return err
		}
		_, err := tx.Exec(ctx, insertTrial, f.lab, id)
		return err
	})
	var expected *store.Error
	if !errors.As(err, &expected) || expected.Code != "not_consented" {
		t.Errorf("a trial without consent: %v, want not_consented", err)
	}
	// The same as the superuser, whom row-level security does not hold.
	conn := connect(t, f.owner)
	if _, err := conn.Exec(ctx, insertRun, id, uuid.NewString()); err != nil {
		t.Fatal(err)
	}
	if _, err := conn.Exec(ctx, `INSERT INTO records (lab_id, run_id, sequence, kind, body) VALUES ($1, $2, 7, 'trial', '{}')`, f.lab, id); err != nil {
		t.Fatal(err)
	}
	if _, err := conn.Exec(ctx, insertTrial, f.lab, id); err == nil || !strings.Contains(err.Error(), "trials_need_consent") {
		t.Errorf("a trial without consent by the superuser: %v", err)
	}
	// And through the store, which then keeps nothing of the upload.
	if _, err := f.store.Append(ctx, f.lab, id, f.records(1)[5:]); !errors.As(err, &expected) {
		t.Errorf("uploaded: %v", err)
	}
	// Nor can a consent go while trials stand on it.
	kept := f.complete()
	if _, err := conn.Exec(ctx, fmt.Sprintf(`SET distal.withdrawal = '%s'`, kept.ID)); err != nil {
		t.Fatal(err)
	}
	if _, err := conn.Exec(ctx, `DELETE FROM consents WHERE run_id = $1`, kept.ID); err == nil || !strings.Contains(err.Error(), "trials_need_consent") {
		t.Errorf("consent deleted under its trials: %v", err)
	}
}

// What was stored cannot be changed nor, but by a withdrawal of that very run, deleted.
func TestAppendOnly(t *testing.T) {
	t.Parallel()
	f := setup(t)
	ctx := context.Background()
	fill(f)
	r, another := f.complete(), f.complete()
	statements := []string{
		`UPDATE runs SET simulated = true`, `UPDATE runs SET seed = 'ffffffffffffffff'`,
		`UPDATE records SET body = '{}'`, `UPDATE consents SET language = 'xx'`, `UPDATE trials SET correct = true`, `UPDATE exclusions SET excluded = false`,
		`UPDATE withdrawals SET records_deleted = 0`, `UPDATE ledger SET action = ''`, `UPDATE bundles SET body = ''`,
		`DELETE FROM trials`, `DELETE FROM records WHERE kind = 'debrief'`, `DELETE FROM exclusions`, `DELETE FROM withdrawals`, `DELETE FROM ledger`,
		fmt.Sprintf(`SELECT set_config('distal.withdrawal', '%s', true); DELETE FROM trials WHERE run_id = '%s'`, another.ID, r.ID),
	}
	for _, statement := range statements {
		err := f.store.InLab(ctx, f.lab, func(tx pgx.Tx) error {
			for part := range strings.SplitSeq(statement, ";") {
				if _, err := tx.Exec(ctx, part); err != nil {
					return err
				}
			}
			return nil
		})
		if !errors.Is(err, store.ErrInvalid) {
			t.Errorf("%s: %v, want a refusal", statement, err)
		}
	}
	if n := len(f.stored(r.ID)); n != 8 {
		t.Errorf("%d records, want 8", n)
	}
}
