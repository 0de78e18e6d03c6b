// Package store keeps labs, studies and runs in Postgres. Every transaction
// names its lab (InLab), and row-level security shows it nothing else. Start
// with Store and, for what arrives from browsers, Append.
package store

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"slices"
	"strings"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"
	"github.com/jackc/pgx/v5/pgconn"
	"github.com/jackc/pgx/v5/pgxpool"
)

// Store is the gate to the database.
type Store struct {
	pool  *pgxpool.Pool
	queue chan *appendRequest
	done  chan struct{}
	stop  context.CancelFunc
}

// Kind is the kind of an expected failure.
type Kind int

// Kinds of expected failures.
const (
	Invalid Kind = iota + 1
	NotFound
	Conflict
	Forbidden
)

// Error is an expected failure with a sentence for people. Code is short and stable.
type Error struct {
	Kind    Kind
	Code    string
	Message string
}

func (e *Error) Error() string { return e.Message }

// Is compares kind and, where the target gives one, code.
func (e *Error) Is(target error) bool {
	t, ok := target.(*Error)
	return ok && t.Kind == e.Kind && (t.Code == "" || t.Code == e.Code)
}

// Sentinels for errors.Is.
var (
	ErrNotFound  = &Error{Kind: NotFound, Message: "not found"}
	ErrConflict  = &Error{Kind: Conflict, Message: "it conflicts with what is stored"}
	ErrInvalid   = &Error{Kind: Invalid, Message: "invalid"}
	ErrForbidden = &Error{Kind: Forbidden, Message: "not allowed"}
)

// ErrBusy says that the database or the server could not answer just now. What
// was asked may or may not have been done; asking again is safe.
var ErrBusy = errors.New("the database does not answer: try again")

// Open connects to the database at url as the server's role.
func Open(ctx context.Context, url string) (*Store, error) {
	config, err := pgxpool.ParseConfig(url)
	if err != nil {
		return nil, fmt.Errorf("database address: %w", err)
	}
	config.MaxConns = 24
	pool, err := pgxpool.NewWithConfig(ctx, config)
	if err != nil {
		return nil, fmt.Errorf("connect to the database: %w", err)
	}
	if err := pool.Ping(ctx); err != nil {
		pool.Close()
		return nil, fmt.Errorf("connect to the database: %w", err)
	}
	running, stop := context.WithCancel(context.Background())
	s := &Store{pool: pool, queue: make(chan *appendRequest, 4096), done: make(chan struct{}), stop: stop}
	go s.commitLoop(running)
	return s, nil
}

// Close waits for what is being committed and closes the connections.
func (s *Store) Close() {
	s.stop()
	<-s.done
	s.pool.Close()
}

// Ping tells whether the database answers.
func (s *Store) Ping(ctx context.Context) error { return interpret(s.pool.Ping(ctx)) }

// InLab runs f in a transaction that sees the rows of one lab only.
func (s *Store) InLab(ctx context.Context, lab uuid.UUID, f func(tx pgx.Tx) error) error {
	return interpret(pgx.BeginFunc(ctx, s.pool, func(tx pgx.Tx) error {
		if err := setLab(ctx, tx, lab); err != nil {
			return err
		}
		return f(tx)
	}))
}

func setLab(ctx context.Context, tx pgx.Tx, lab uuid.UUID) error {
	_, err := tx.Exec(ctx, `SELECT set_config('distal.lab_id', $1, true)`, lab.String())
	return err
}

// interpret turns the driver's errors into expected failures, by SQLSTATE and constraint.
func interpret(err error) error {
	var pg *pgconn.PgError
	switch {
	case err == nil:
		return nil
	case errors.Is(err, pgx.ErrNoRows):
		return ErrNotFound
	case unavailable(err):
		return fmt.Errorf("%w: %w", ErrBusy, err)
	case !errors.As(err, &pg):
		return err
	}
	switch pg.Code {
	case "23505": // unique_violation
		return &Error{Conflict, pg.ConstraintName, conflictMessage(pg.ConstraintName)}
	case "23503": // foreign_key_violation
		if pg.ConstraintName == "trials_need_consent" {
			return &Error{Conflict, "not_consented", "a trial cannot be stored before consent"}
		}
		return &Error{Conflict, pg.ConstraintName, "it refers to something that does not exist"}
	case "23514", "23001": // check_violation, restrict_violation
		return &Error{Invalid, pg.ConstraintName, "the database refuses it: " + pg.ConstraintName}
	case "42501": // insufficient_privilege
		return ErrForbidden
	}
	if strings.HasPrefix(pg.Code, "22") { // data_exception: e.g. a NUL character in a text
		return &Error{Invalid, "value", "the database cannot hold one of the values"}
	}
	return err
}

// unavailable tells whether err is a lost or refused connection, a server that
// stops, or a conflict that the next attempt will not meet.
func unavailable(err error) bool {
	var pg *pgconn.PgError
	if errors.As(err, &pg) {
		class := pg.Code[:min(2, len(pg.Code))]
		// Connection, rolled back, resources, operator intervention.
		return slices.Contains([]string{"08", "40", "53", "57"}, class)
	}
	var connecting *pgconn.ConnectError
	var network net.Error
	return errors.As(err, &connecting) || errors.As(err, &network) || errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) ||
		errors.Is(err, net.ErrClosed) || errors.Is(err, context.DeadlineExceeded) || pgconn.SafeToRetry(err)
}

func conflictMessage(constraint string) string {
	switch constraint {
	case "runs_once_per_device", "runs_once_per_invitation":
		return "somebody has already taken part with this device or invitation"
	case "people_email_once":
		return "somebody with this e-mail address is already in the lab"
	}
	return "it exists already"
}

// collect reads all rows of a query into structs by column name.
func collect[T any](ctx context.Context, tx pgx.Tx, query string, args pgx.NamedArgs) ([]T, error) {
	rows, err := tx.Query(ctx, query, args)
	if err != nil {
		return nil, err
	}
	return pgx.CollectRows(rows, pgx.RowToStructByName[T])
}

// one reads exactly one row.
func one[T any](ctx context.Context, tx pgx.Tx, query string, args pgx.NamedArgs) (T, error) {
	rows, err := tx.Query(ctx, query, args)
	if err != nil {
		var zero T
		return zero, err
	}
	return pgx.CollectExactlyOneRow(rows, pgx.RowToStructByName[T])
}

// NewID makes a time-ordered identifier.
func NewID() uuid.UUID { return uuid.Must(uuid.NewV7()) }

// wait is how long a batch of uploads collects before it is committed.
const wait = 2 * time.Millisecond
