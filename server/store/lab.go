package store

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/server/bundle"
)

// Person is somebody of a lab.
type Person struct {
	ID     uuid.UUID `db:"person_id"`
	Name   string    `db:"name"`
	Email  string    `db:"email"`
	Role   string    `db:"role"`
	Active bool      `db:"active"`
}

// Roles of people.
const (
	RoleResearcher = "researcher"
	RoleAdmin      = "admin"
)

// CreateLab makes a lab and its first signing key, whose private half is sealed by seal.
func (s *Store) CreateLab(ctx context.Context, name string, seal func([]byte) ([]byte, error)) (uuid.UUID, error) {
	lab := NewID()
	err := s.InLab(ctx, lab, func(tx pgx.Tx) error {
		if _, err := tx.Exec(ctx, `INSERT INTO labs (lab_id, name) VALUES ($1, $2)`, lab, name); err != nil {
			return err
		}
		return addKey(ctx, tx, lab, seal)
	})
	return lab, err
}

// RotateKey makes a new signing key; old public keys stay published.
func (s *Store) RotateKey(ctx context.Context, lab uuid.UUID, seal func([]byte) ([]byte, error)) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error { return addKey(ctx, tx, lab, seal) })
}

func addKey(ctx context.Context, tx pgx.Tx, lab uuid.UUID, seal func([]byte) ([]byte, error)) error {
	key, err := bundle.NewKey()
	if err != nil {
		return err
	}
	der, err := key.Marshal()
	if err != nil {
		return err
	}
	sealed, err := seal(der)
	if err != nil {
		return err
	}
	_, err = tx.Exec(ctx, `INSERT INTO keys (lab_id, key_id, public_jwk, private_key, created_at) VALUES ($1, $2, $3, $4, clock_timestamp())`,
		lab, key.Public.ID, key.Public, sealed)
	return err
}

// FindKeys gives the sealed newest private key and all public keys, newest first.
func (s *Store) FindKeys(ctx context.Context, lab uuid.UUID) (sealed []byte, public bundle.KeySet, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		rows, err := tx.Query(ctx, `SELECT public_jwk, private_key FROM keys ORDER BY created_at DESC, key_id`)
		if err != nil {
			return err
		}
		defer rows.Close()
		for rows.Next() {
			var jwk bundle.PublicKey
			var private []byte
			if err := rows.Scan(&jwk, &private); err != nil {
				return err
			}
			if sealed == nil {
				sealed = private
			}
			public.Keys = append(public.Keys, jwk)
		}
		return rows.Err()
	})
	if err == nil && sealed == nil {
		err = ErrNotFound
	}
	return sealed, public, err
}

// PublicKeys are the public keys of all labs.
func (s *Store) PublicKeys(ctx context.Context) (bundle.KeySet, error) {
	rows, err := s.pool.Query(ctx, `SELECT public_keys()`)
	if err != nil {
		return bundle.KeySet{}, interpret(err)
	}
	keys, err := pgx.CollectRows(rows, pgx.RowTo[bundle.PublicKey])
	return bundle.KeySet{Keys: keys}, interpret(err)
}

// Labs are the identifiers of all labs, oldest first.
func (s *Store) Labs(ctx context.Context) ([]uuid.UUID, error) {
	rows, err := s.pool.Query(ctx, `SELECT all_labs()`)
	if err != nil {
		return nil, interpret(err)
	}
	labs, err := pgx.CollectRows(rows, pgx.RowTo[uuid.UUID])
	return labs, interpret(err)
}

// LabName is the name of a lab.
func (s *Store) LabName(ctx context.Context, lab uuid.UUID) (name string, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		return tx.QueryRow(ctx, `SELECT name FROM labs WHERE lab_id = $1`, lab).Scan(&name)
	})
	return name, err
}

// CreatePerson adds somebody to a lab. actor is the person who did it, Nil for the server.
func (s *Store) CreatePerson(ctx context.Context, lab, actor uuid.UUID, p Person) (uuid.UUID, error) {
	id := NewID()
	err := s.InLab(ctx, lab, func(tx pgx.Tx) error {
		if _, err := tx.Exec(ctx, `INSERT INTO people (lab_id, person_id, name, email, role) VALUES ($1, $2, $3, $4, $5)`,
			lab, id, p.Name, p.Email, p.Role); err != nil {
			return err
		}
		return enter(ctx, tx, lab, actor, "person added", id.String(), map[string]any{"name": p.Name, "role": p.Role})
	})
	return id, err
}

// SetPersonActive lets a person in or keeps them out.
func (s *Store) SetPersonActive(ctx context.Context, lab, actor, person uuid.UUID, active bool) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		tag, err := tx.Exec(ctx, `UPDATE people SET active = $3 WHERE lab_id = $1 AND person_id = $2`, lab, person, active)
		if err != nil {
			return err
		}
		if tag.RowsAffected() == 0 {
			return ErrNotFound
		}
		return enter(ctx, tx, lab, actor, "person changed", person.String(), map[string]any{"active": active})
	})
}

const personColumns = `person_id, name, email, role, active`

// FindPerson finds a person by identifier.
func (s *Store) FindPerson(ctx context.Context, lab, id uuid.UUID) (p Person, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		p, err = one[Person](ctx, tx, `SELECT `+personColumns+` FROM people WHERE person_id = @id`, pgx.NamedArgs{"id": id})
		return err
	})
	return p, err
}

// FindPeople lists the people of a lab.
func (s *Store) FindPeople(ctx context.Context, lab uuid.UUID) (list []Person, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Person](ctx, tx, `SELECT `+personColumns+` FROM people ORDER BY name`, nil)
		return err
	})
	return list, err
}

// SpendToken marks a token as used or revoked. ErrConflict says that it already was.
func (s *Store) SpendToken(ctx context.Context, lab uuid.UUID, tokenID, reason string, expires time.Time) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		if _, err := tx.Exec(ctx, `DELETE FROM spent_tokens WHERE expires_at < now() - interval '1 day'`); err != nil {
			return err
		}
		_, err := tx.Exec(ctx, `INSERT INTO spent_tokens (lab_id, token_id, reason, expires_at) VALUES ($1, $2, $3, $4)`, lab, tokenID, reason, expires)
		return err
	})
}

// TokenSpent tells whether a token was used or revoked.
func (s *Store) TokenSpent(ctx context.Context, lab uuid.UUID, tokenID string) (spent bool, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		return tx.QueryRow(ctx, `SELECT EXISTS (SELECT FROM spent_tokens WHERE token_id = $1)`, tokenID).Scan(&spent)
	})
	return spent, err
}

// Entry is one line of the ledger.
type Entry struct {
	Number int64     `db:"number"`
	At     time.Time `db:"at"`
	Person string    `db:"person"` // name, "" for the server or a participant
	Action string    `db:"action"`
	Detail string    `db:"detail"`
}

// Ledger lists the newest entries.
func (s *Store) Ledger(ctx context.Context, lab uuid.UUID, limit int) (list []Entry, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Entry](ctx, tx, `
			SELECT l.number, l.at, COALESCE(p.name, '') AS person, l.action, l.detail
			FROM ledger l LEFT JOIN people p ON p.lab_id = l.lab_id AND p.person_id = l.person_id
			ORDER BY l.number DESC LIMIT @limit`, pgx.NamedArgs{"limit": limit})
		return err
	})
	return list, err
}

// VerifyLedger checks the chain of digests; it returns the number of the first
// entry that does not fit, 0 if all do.
func (s *Store) VerifyLedger(ctx context.Context, lab uuid.UUID) (bad int64, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		rows, err := tx.Query(ctx, `SELECT number, at, COALESCE(person_id::text, ''), action, subject, detail, previous, digest FROM ledger ORDER BY number`)
		if err != nil {
			return err
		}
		defer rows.Close()
		last, expected := "", int64(1)
		for rows.Next() {
			var number int64
			var at time.Time
			var person, action, subject, detail, previous, digest string
			if err := rows.Scan(&number, &at, &person, &action, &subject, &detail, &previous, &digest); err != nil {
				return err
			}
			if bad == 0 && (number != expected || previous != last || digest != entryDigest(number, at, person, action, subject, detail, previous)) {
				bad = number
			}
			last, expected = digest, number+1
		}
		return rows.Err()
	})
	return bad, err
}

// entryDigest is over everything that an entry says, its time to the microsecond.
func entryDigest(number int64, at time.Time, person, action, subject, detail, previous string) string {
	sum := sha256.Sum256(fmt.Appendf(nil, "%d\n%d\n%s\n%s\n%s\n%s\n%s", number, at.UnixMicro(), person, action, subject, detail, previous))
	return hex.EncodeToString(sum[:])
}

// enter adds a line to the ledger within the caller's transaction.
func enter(ctx context.Context, tx pgx.Tx, lab, actor uuid.UUID, action, subject string, detail map[string]any) error {
	text, err := json.Marshal(detail)
	if err != nil {
		return err
	}
	// One writer at a time for each lab, or the chain would fork.
	if _, err := tx.Exec(ctx, `SELECT pg_advisory_xact_lock(hashtextextended($1, 7))`, lab.String()); err != nil {
		return err
	}
	var number int64
	var previous string
	err = tx.QueryRow(ctx, `SELECT number, digest FROM ledger ORDER BY number DESC LIMIT 1`).Scan(&number, &previous)
	if err != nil && err != pgx.ErrNoRows {
		return err
	}
	number++
	var person *uuid.UUID
	personText := ""
	if actor != uuid.Nil {
		person, personText = &actor, actor.String()
	}
	at := time.Now().UTC().Truncate(time.Microsecond) // as exact as the database keeps it
	_, err = tx.Exec(ctx, `INSERT INTO ledger (lab_id, number, at, person_id, action, subject, detail, previous, digest) VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9)`,
		lab, number, at, person, action, subject, string(text), previous,
		entryDigest(number, at, personText, action, subject, string(text), previous))
	return err
}
