package store

import (
	"context"
	"time"

	"github.com/google/uuid"
	"github.com/jackc/pgx/v5"

	"distal/server/bundle"
	"distal/web"
)

// Study is a launched or drafted study.
type Study struct {
	ID        uuid.UUID `db:"study_id"`
	Link      string    `db:"link"`
	Name      string    `db:"name"`
	Title     string    `db:"title"`
	State     string    `db:"state"`
	Quota     int       `db:"quota"`
	Bundle    string    `db:"bundle_digest"`
	CreatedAt time.Time `db:"created_at"`

	Running    int `db:"running"`   // begun in the last two hours and not ended
	Completed  int `db:"completed"` // human, whether excluded or not
	Excluded   int `db:"excluded"`
	Refused    int `db:"refused"`
	Withdrawn  int `db:"withdrawn"`
	Simulated  int `db:"simulated"`
	Incomplete int `db:"incomplete"`
}

// Valid is the number of human runs that count against the quota.
func (s Study) Valid() int { return s.Completed - s.Excluded }

// States of a study.
const (
	StateDraft  = "draft"
	StateOpen   = "open"
	StatePaused = "paused"
	StateClosed = "closed"
)

// excludedNow tells of run r whether the newest decision of any rule or, above
// all rules, of a person excludes it.
const excludedNow = `COALESCE(
	(SELECT e.excluded FROM exclusions e WHERE e.lab_id = r.lab_id AND e.run_id = r.run_id AND e.rule = '' ORDER BY e.number DESC LIMIT 1),
	(SELECT bool_or(x.excluded) FROM (SELECT DISTINCT ON (e.rule) e.excluded FROM exclusions e
	    WHERE e.lab_id = r.lab_id AND e.run_id = r.run_id AND e.rule <> '' ORDER BY e.rule, e.number DESC) x),
	false)`

const studyColumns = `
	SELECT s.study_id, s.link, s.name, s.title, s.state, s.quota, COALESCE(s.bundle_digest, '') AS bundle_digest, s.created_at,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome IS NULL AND r.updated_at > now() - interval '2 hours') AS running,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome IS NULL AND r.updated_at <= now() - interval '2 hours') AS incomplete,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome = 'completed') AS completed,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome = 'completed' AND ` + excludedNow + `) AS excluded,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome = 'refused') AS refused,
	       count(*) FILTER (WHERE NOT r.simulated AND r.outcome = 'withdrawn') AS withdrawn,
	       count(*) FILTER (WHERE r.simulated AND r.outcome IS DISTINCT FROM 'withdrawn') AS simulated
	FROM studies s LEFT JOIN runs r ON r.lab_id = s.lab_id AND r.study_id = s.study_id`

// FindStudies lists the studies of a lab, newest first.
func (s *Store) FindStudies(ctx context.Context, lab uuid.UUID) (list []Study, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Study](ctx, tx, studyColumns+` GROUP BY s.lab_id, s.study_id ORDER BY s.created_at DESC`, nil)
		return err
	})
	return list, err
}

// FindStudy finds a study by identifier.
func (s *Store) FindStudy(ctx context.Context, lab, id uuid.UUID) (study Study, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		study, err = one[Study](ctx, tx, studyColumns+` WHERE s.study_id = @id GROUP BY s.lab_id, s.study_id`, pgx.NamedArgs{"id": id})
		return err
	})
	return study, interpret(err)
}

// FindStudyByLink finds a study and its lab by the public link.
func (s *Store) FindStudyByLink(ctx context.Context, link string) (lab uuid.UUID, study Study, err error) {
	var found *uuid.UUID
	if err := s.pool.QueryRow(ctx, `SELECT lab_of_link($1)`, link).Scan(&found); err != nil {
		return uuid.Nil, Study{}, interpret(err)
	}
	if found == nil {
		return uuid.Nil, Study{}, ErrNotFound
	}
	err = s.InLab(ctx, *found, func(tx pgx.Tx) error {
		study, err = one[Study](ctx, tx, studyColumns+` WHERE s.link = @link GROUP BY s.lab_id, s.study_id`, pgx.NamedArgs{"link": link})
		return err
	})
	return *found, study, err
}

// LaunchStudy stores a study with its signed bundle and assets and opens it.
func (s *Store) LaunchStudy(ctx context.Context, lab, actor uuid.UUID, link string, b bundle.Bundle, signed bundle.Signed, assets []web.Asset) (uuid.UUID, error) {
	id := NewID()
	err := s.InLab(ctx, lab, func(tx pgx.Tx) error {
		for _, a := range assets {
			if _, err := tx.Exec(ctx, `INSERT INTO assets (lab_id, digest, media_type, plain, brotli) VALUES ($1, $2, $3, $4, $5) ON CONFLICT DO NOTHING`,
				lab, a.Digest, a.MediaType, a.Plain, a.Compressed); err != nil {
				return err
			}
		}
		if _, err := tx.Exec(ctx, `INSERT INTO studies (lab_id, study_id, link, name, title, quota, created_by) VALUES ($1, $2, $3, $4, $5, $6, $7)`,
			lab, id, link, b.Study.About.Name, b.Study.About.Title, b.Study.Quota.Runs, actor); err != nil {
			return err
		}
		// The same study launched twice has the same bundle; the first launch keeps it.
		if _, err := tx.Exec(ctx, `INSERT INTO bundles (lab_id, digest, study_id, body, signature) VALUES ($1, $2, $3, $4, $5) ON CONFLICT DO NOTHING`,
			lab, b.Digest, id, string(b.Text), signed.Signature); err != nil {
			return err
		}
		if _, err := tx.Exec(ctx, `UPDATE studies SET bundle_digest = $3, state = 'open' WHERE lab_id = $1 AND study_id = $2`, lab, id, b.Digest); err != nil {
			return err
		}
		return enter(ctx, tx, lab, actor, "study launched", id.String(), map[string]any{
			"study": b.Study.About.Name, "bundle": b.Digest, "flash_approval": b.Study.About.FlashApproval})
	})
	return id, err
}

// SetStudyState opens, pauses or closes a study.
func (s *Store) SetStudyState(ctx context.Context, lab, actor, id uuid.UUID, state string) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		var before string
		if err := tx.QueryRow(ctx, `SELECT state FROM studies WHERE study_id = $1 FOR UPDATE`, id).Scan(&before); err != nil {
			return err
		}
		if _, err := tx.Exec(ctx, `UPDATE studies SET state = $2 WHERE study_id = $1`, id, state); err != nil {
			return err
		}
		return enter(ctx, tx, lab, actor, "study "+state, id.String(), map[string]any{"before": before})
	})
}

// SetStudyQuota changes how many valid runs are wanted, 0 for no limit.
func (s *Store) SetStudyQuota(ctx context.Context, lab, actor, id uuid.UUID, quota int) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		tag, err := tx.Exec(ctx, `UPDATE studies SET quota = $2 WHERE study_id = $1`, id, quota)
		if err != nil {
			return err
		}
		if tag.RowsAffected() == 0 {
			return ErrNotFound
		}
		return enter(ctx, tx, lab, actor, "quota changed", id.String(), map[string]any{"quota": quota})
	})
}

// FindBundle gives a bundle's text, signature and lab.
func (s *Store) FindBundle(ctx context.Context, digest string) (lab uuid.UUID, signed bundle.Signed, err error) {
	err = s.pool.QueryRow(ctx, `SELECT lab_id, body, signature FROM bundle_of_digest($1)`, digest).Scan(&lab, &signed.Bundle, &signed.Signature)
	return lab, signed, interpret(err)
}

// FindAsset gives an asset by its digest.
func (s *Store) FindAsset(ctx context.Context, digest string) (mediaType string, plain, brotli []byte, err error) {
	err = s.pool.QueryRow(ctx, `SELECT media_type, plain, brotli FROM asset_of_digest($1)`, digest).Scan(&mediaType, &plain, &brotli)
	return mediaType, plain, brotli, interpret(err)
}

// Invitation is a single-use way into a study.
type Invitation struct {
	ID        uuid.UUID `db:"invitation_id"`
	Study     uuid.UUID `db:"study_id"`
	Label     string    `db:"label"`
	Revoked   bool      `db:"revoked"`
	Used      bool      `db:"used"`
	CreatedAt time.Time `db:"created_at"`
}

const invitationColumns = `SELECT i.invitation_id, i.study_id, i.label, i.revoked, i.created_at,
	EXISTS (SELECT FROM runs r WHERE r.lab_id = i.lab_id AND r.invitation_id = i.invitation_id) AS used FROM invitations i`

// CreateInvitations makes n invitations.
func (s *Store) CreateInvitations(ctx context.Context, lab, actor, study uuid.UUID, label string, n int) (list []Invitation, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		for range n {
			i := Invitation{ID: NewID(), Study: study, Label: label, CreatedAt: time.Now()}
			if _, err := tx.Exec(ctx, `INSERT INTO invitations (lab_id, invitation_id, study_id, label, created_by) VALUES ($1, $2, $3, $4, $5)`,
				lab, i.ID, study, label, actor); err != nil {
				return err
			}
			list = append(list, i)
		}
		return enter(ctx, tx, lab, actor, "invitations made", study.String(), map[string]any{"number": n, "label": label})
	})
	return list, err
}

// FindInvitations lists a study's invitations, newest first.
func (s *Store) FindInvitations(ctx context.Context, lab, study uuid.UUID) (list []Invitation, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		list, err = collect[Invitation](ctx, tx, invitationColumns+` WHERE i.study_id = @study ORDER BY i.created_at DESC, i.invitation_id`, pgx.NamedArgs{"study": study})
		return err
	})
	return list, err
}

// FindInvitation finds one invitation.
func (s *Store) FindInvitation(ctx context.Context, lab, id uuid.UUID) (i Invitation, err error) {
	err = s.InLab(ctx, lab, func(tx pgx.Tx) error {
		i, err = one[Invitation](ctx, tx, invitationColumns+` WHERE i.invitation_id = @id`, pgx.NamedArgs{"id": id})
		return err
	})
	return i, err
}

// RevokeInvitation makes an invitation useless.
func (s *Store) RevokeInvitation(ctx context.Context, lab, actor, id uuid.UUID) error {
	return s.InLab(ctx, lab, func(tx pgx.Tx) error {
		tag, err := tx.Exec(ctx, `UPDATE invitations SET revoked = true WHERE invitation_id = $1`, id)
		if err != nil {
			return err
		}
		if tag.RowsAffected() == 0 {
			return ErrNotFound
		}
		return enter(ctx, tx, lab, actor, "invitation revoked", id.String(), map[string]any{})
	})
}
