package access_test

import (
	"context"
	"errors"
	"strings"
	"testing"
	"time"

	"github.com/golang-jwt/jwt/v5"
	"github.com/google/uuid"

	"distal/server/access"
	"distal/server/bundle"
)

type ring map[uuid.UUID]bundle.Key

func (r ring) SigningKey(_ context.Context, lab uuid.UUID) (bundle.Key, error) { return r[lab], nil }

func (r ring) PublicKeys(_ context.Context, lab uuid.UUID) (bundle.KeySet, error) {
	return bundle.KeySet{Keys: []bundle.PublicKey{r[lab].Public}}, nil
}

func newKey(t *testing.T) bundle.Key {
	t.Helper()
	key, err := bundle.NewKey()
	if err != nil {
		t.Fatal(err)
	}
	return key
}

func TestTokens(t *testing.T) {
	t.Parallel()

	labA, labB, run := uuid.New(), uuid.New(), uuid.New()
	keys := ring{labA: newKey(t), labB: newKey(t)}
	now := time.Date(2026, 11, 3, 9, 0, 0, 0, time.UTC)
	tokens := access.Tokens{Keys: keys, Issuer: "distal", Now: func() time.Time { return now }}
	ctx := context.Background()
	text, _, err := tokens.Issue(ctx, access.AudienceRun, labA, uuid.New(), run)
	if err != nil {
		t.Fatal(err)
	}

	later := tokens
	later.Now = func() time.Time { return now.Add(access.Life(access.AudienceRun) + time.Minute) }
	otherIssuer := tokens
	otherIssuer.Issuer = "elsewhere"
	flipped := []byte(text)
	flipped[len(flipped)-10] ^= 1
	unsigned, _ := jwt.NewWithClaims(jwt.SigningMethodNone, access.Claims{Lab: labA}).SignedString(jwt.UnsafeAllowNoneSignatureType)
	// A token whose payload names lab B but which lab A signed.
	parts := strings.Split(text, ".")
	textB, _, _ := tokens.Issue(ctx, access.AudienceRun, labB, uuid.New(), run)
	crossed := parts[0] + "." + strings.Split(textB, ".")[1] + "." + parts[2]

	tests := []struct {
		name   string
		given  string
		tokens access.Tokens
		as     access.Audience
		expect error
	}{
		{"OK", text, tokens, access.AudienceRun, nil},
		{"ErrOtherAudience", text, tokens, access.AudienceSession, access.ErrInvalid},
		{"ErrExpired", text, later, access.AudienceRun, access.ErrExpired},
		{"ErrOtherIssuer", text, otherIssuer, access.AudienceRun, access.ErrInvalid},
		{"ErrFlippedBit", string(flipped), tokens, access.AudienceRun, access.ErrInvalid},
		{"ErrUnsigned", unsigned, tokens, access.AudienceRun, access.ErrInvalid},
		{"ErrOtherLab", crossed, tokens, access.AudienceRun, access.ErrInvalid},
		{"ErrEmpty", "", tokens, access.AudienceRun, access.ErrInvalid},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			claims, err := tt.tokens.Check(ctx, tt.as, tt.given)
			if !errors.Is(err, tt.expect) || (tt.expect == nil && err != nil) {
				t.Fatalf("error %v, want %v", err, tt.expect)
			}
			if tt.expect == nil && claims.Subject != run.String() {
				t.Errorf("subject %s, want %s", claims.Subject, run)
			}
		})
	}
}
