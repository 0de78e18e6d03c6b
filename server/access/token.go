// Package access issues and checks every token of the server: run tokens of
// participants, invitations, sign-in links and sessions of staff. Each has its
// own audience and a short life; the store can revoke each by its identifier.
package access

import (
	"context"
	"errors"
	"fmt"
	"time"

	"github.com/golang-jwt/jwt/v5"
	"github.com/google/uuid"

	"distal/server/bundle"
)

// Audience says what a token is good for.
type Audience string

// Audiences of tokens, one a purpose: a token of one is refused for another.
const (
	AudienceRun        Audience = "distal-run"
	AudienceInvitation Audience = "distal-invitation"
	AudienceSignIn     Audience = "distal-sign-in"
	AudienceSession    Audience = "distal-session"
)

// Life of a token by audience. A run may be resumed for two weeks.
var life = map[Audience]time.Duration{
	AudienceRun:        14 * 24 * time.Hour,
	AudienceInvitation: 60 * 24 * time.Hour,
	AudienceSignIn:     30 * time.Minute,
	AudienceSession:    12 * time.Hour,
}

// Life is how long a token of audience a is good for.
func Life(a Audience) time.Duration { return life[a] }

// Claims of every token. Subject is the run, invitation or person.
type Claims struct {
	Lab   uuid.UUID `json:"lab"`
	Study uuid.UUID `json:"study,omitzero"`
	jwt.RegisteredClaims
}

// SubjectID is the subject as an identifier.
func (c Claims) SubjectID() (uuid.UUID, error) { return uuid.Parse(c.Subject) }

// Reasons why a token is refused, for errors.Is.
var (
	ErrExpired = errors.New("the token has expired")
	ErrInvalid = errors.New("the token is not valid")
)

// KeySource gives a lab's keys.
type KeySource interface {
	SigningKey(ctx context.Context, lab uuid.UUID) (bundle.Key, error)
	PublicKeys(ctx context.Context, lab uuid.UUID) (bundle.KeySet, error)
}

// Tokens issues and checks tokens.
type Tokens struct {
	Keys   KeySource
	Issuer string
	Now    func() time.Time
}

// Issue signs a token of audience a for subject.
func (t Tokens) Issue(ctx context.Context, a Audience, lab, study, subject uuid.UUID) (string, Claims, error) {
	key, err := t.Keys.SigningKey(ctx, lab)
	if err != nil {
		return "", Claims{}, fmt.Errorf("issue %s token: %w", a, err)
	}
	id, err := uuid.NewV7()
	if err != nil {
		return "", Claims{}, fmt.Errorf("issue %s token: %w", a, err)
	}
	now := t.Now()
	claims := Claims{Lab: lab, Study: study, RegisteredClaims: jwt.RegisteredClaims{
		Issuer: t.Issuer, Audience: jwt.ClaimStrings{string(a)}, Subject: subject.String(),
		IssuedAt: jwt.NewNumericDate(now), ExpiresAt: jwt.NewNumericDate(now.Add(life[a])), ID: id.String(),
	}}
	token := jwt.NewWithClaims(jwt.SigningMethodES256, claims)
	token.Header["kid"] = key.Public.ID
	text, err := token.SignedString(key.Private)
	if err != nil {
		return "", Claims{}, fmt.Errorf("sign %s token: %w", a, err)
	}
	return text, claims, nil
}

// Check verifies signature, method, issuer, audience and times of a token.
// The lab named in the token selects the keys that it must verify with.
func (t Tokens) Check(ctx context.Context, a Audience, text string) (Claims, error) {
	var claims Claims
	parser := jwt.NewParser(
		jwt.WithValidMethods([]string{jwt.SigningMethodES256.Alg()}),
		jwt.WithIssuer(t.Issuer), jwt.WithAudience(string(a)),
		jwt.WithExpirationRequired(), jwt.WithIssuedAt(), jwt.WithTimeFunc(t.Now), jwt.WithStrictDecoding(),
		jwt.WithLeeway(30*time.Second),
	)
	_, err := parser.ParseWithClaims(text, &claims, func(token *jwt.Token) (any, error) {
		keys, err := t.Keys.PublicKeys(ctx, claims.Lab)
		if err != nil {
			return nil, err
		}
		kid, _ := token.Header["kid"].(string)
		return keys.Find(kid)
	})
	switch {
	case errors.Is(err, jwt.ErrTokenExpired):
		return Claims{}, ErrExpired
	case err != nil:
		return Claims{}, fmt.Errorf("%w: %v", ErrInvalid, err)
	}
	if _, err := claims.SubjectID(); err != nil || claims.Lab == uuid.Nil {
		return Claims{}, fmt.Errorf("%w: it names no subject", ErrInvalid)
	}
	return claims, nil
}
