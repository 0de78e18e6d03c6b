// Package bundle freezes a study for delivery: canonical form (RFC 8785),
// digests and an ES256 signature, and verifies what was frozen, offline.
// Start with Assemble and Verify.
package bundle

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/golang-jwt/jwt/v5"
	"github.com/google/uuid"

	"distal/experiments/study"
	"distal/experiments/value"
)

// What a bundle's signature says about itself.
const (
	Issuer   = "distal"
	Audience = "distal-bundle"
)

// Names of the assets that every run loads, in Bundle.Assets.
const (
	AssetEngine = "engine"
	AssetScript = "participant_js"
	AssetStyle  = "participant_css"
)

// Bundle is a study frozen for delivery.
type Bundle struct {
	Text        []byte            // canonical JSON of format, study and assets
	Digest      string            // SHA-256 of Text, hex
	StudyDigest string            // SHA-256 of the canonical study alone, hex
	StudyText   []byte            // canonical JSON of the study
	Assets      map[string]string // name → SHA-256, hex
	Study       *study.Study
}

// Signed is the wire and file form of a bundle. Keys travels with exported
// files only, so that a reader can verify offline.
type Signed struct {
	Bundle    string  `json:"bundle"`
	Signature string  `json:"signature"`
	Keys      *KeySet `json:"keys,omitempty"`
}

// Claims are the claims of a bundle's signature.
type Claims struct {
	Bundle string            `json:"bundle"`
	Study  string            `json:"study"`
	Assets map[string]string `json:"assets"`
	jwt.RegisteredClaims
}

// Reasons why a bundle is refused, for errors.Is.
var (
	ErrSignature = errors.New("the signature does not verify")
	ErrAltered   = errors.New("the content is not what was signed")
)

// Digest is the SHA-256 of b in hexadecimal.
func Digest(b []byte) string {
	sum := sha256.Sum256(b)
	return hex.EncodeToString(sum[:])
}

// Assemble freezes s together with the digests of the assets that a run loads.
func Assemble(s *study.Study, assets map[string]string) (Bundle, error) {
	for _, name := range []string{AssetEngine, AssetScript, AssetStyle} {
		if len(assets[name]) != sha256.Size*2 {
			return Bundle{}, fmt.Errorf("assemble bundle of %s: asset %s has no digest", s.About.Name, name)
		}
	}
	encoded := s.Encode()
	studyText, err := value.Canonical(encoded)
	if err != nil {
		return Bundle{}, fmt.Errorf("canonical form of study %s: %w", s.About.Name, err)
	}
	members := []value.Member{}
	for name, digest := range assets {
		members = append(members, value.Member{Key: name, Value: value.String(digest)})
	}
	text, err := value.Canonical(value.Object(
		value.Member{Key: "format", Value: value.Number(1)},
		value.Member{Key: "study", Value: encoded},
		value.Member{Key: "assets", Value: value.Object(members...)},
	))
	if err != nil {
		return Bundle{}, fmt.Errorf("canonical form of bundle %s: %w", s.About.Name, err)
	}
	return Bundle{
		Text: text, Digest: Digest(text),
		StudyText: studyText, StudyDigest: Digest(studyText),
		Assets: assets, Study: s,
	}, nil
}

// Sign signs b with key at the given time.
func (b Bundle) Sign(key Key, now time.Time) (Signed, error) {
	id, err := uuid.NewV7()
	if err != nil {
		return Signed{}, fmt.Errorf("sign bundle: %w", err)
	}
	token := jwt.NewWithClaims(jwt.SigningMethodES256, Claims{
		Bundle: b.Digest, Study: b.StudyDigest, Assets: b.Assets,
		RegisteredClaims: jwt.RegisteredClaims{
			Issuer: Issuer, Audience: jwt.ClaimStrings{Audience},
			Subject: b.Study.About.Name, IssuedAt: jwt.NewNumericDate(now), ID: id.String(),
		},
	})
	token.Header["kid"] = key.Public.ID
	signature, err := token.SignedString(key.Private)
	if err != nil {
		return Signed{}, fmt.Errorf("sign bundle: %w", err)
	}
	return Signed{Bundle: string(b.Text), Signature: signature}, nil
}

// Verify checks signature, claims, canonical form and digests of s against keys
// and returns the bundle. Nothing of s is used before its signature holds.
func Verify(s Signed, keys KeySet) (Bundle, Claims, error) {
	claims, err := verifySignature(s.Signature, keys)
	if err != nil {
		return Bundle{}, Claims{}, err
	}
	if got := Digest([]byte(s.Bundle)); got != claims.Bundle {
		return Bundle{}, claims, fmt.Errorf("bundle digest %s, signed %s: %w", got, claims.Bundle, ErrAltered)
	}
	b, err := Open([]byte(s.Bundle))
	if err != nil {
		return Bundle{}, claims, err
	}
	if b.StudyDigest != claims.Study {
		return Bundle{}, claims, fmt.Errorf("study digest %s, signed %s: %w", b.StudyDigest, claims.Study, ErrAltered)
	}
	if len(b.Assets) != len(claims.Assets) {
		return Bundle{}, claims, fmt.Errorf("%d assets, signed %d: %w", len(b.Assets), len(claims.Assets), ErrAltered)
	}
	for name, digest := range claims.Assets {
		if b.Assets[name] != digest {
			return Bundle{}, claims, fmt.Errorf("asset %s: %w", name, ErrAltered)
		}
	}
	return b, claims, nil
}

func verifySignature(signature string, keys KeySet) (Claims, error) {
	var claims Claims
	parser := jwt.NewParser(
		jwt.WithValidMethods([]string{jwt.SigningMethodES256.Alg()}),
		jwt.WithIssuer(Issuer), jwt.WithAudience(Audience), jwt.WithStrictDecoding(),
	)
	_, err := parser.ParseWithClaims(signature, &claims, func(t *jwt.Token) (any, error) {
		kid, _ := t.Header["kid"].(string)
		return keys.Find(kid)
	})
	if errors.Is(err, ErrUnknownKey) {
		return claims, err
	}
	if err != nil {
		return claims, fmt.Errorf("%w: %v", ErrSignature, err)
	}
	return claims, nil
}

// Open reads the text of a bundle without any signature: use it only on text
// from our own store, or after Verify.
func Open(text []byte) (Bundle, error) {
	tree, err := value.ParseJSON(text)
	if err != nil {
		return Bundle{}, fmt.Errorf("bundle: %w", err)
	}
	studyTree, ok := tree.Get("study")
	if !ok {
		return Bundle{}, errors.New("bundle: it holds no study")
	}
	s, problems := study.Decode(studyTree)
	if problems.Failed() {
		return Bundle{}, fmt.Errorf("study of the bundle: %w", problems)
	}
	studyText, err := value.Canonical(studyTree)
	if err != nil {
		return Bundle{}, fmt.Errorf("study of the bundle: %w", err)
	}
	canonical, err := value.Canonical(tree)
	if err != nil {
		return Bundle{}, fmt.Errorf("bundle: %w", err)
	}
	if string(canonical) != string(text) {
		return Bundle{}, fmt.Errorf("bundle is not in canonical form: %w", ErrAltered)
	}
	assets := map[string]string{}
	if tree, ok := tree.Get("assets"); ok {
		for _, m := range tree.Members {
			assets[m.Key] = m.Value.Str
		}
	}
	return Bundle{
		Text: text, Digest: Digest(text), StudyText: studyText,
		StudyDigest: Digest(studyText), Assets: assets, Study: s,
	}, nil
}

// ReadFile reads the file form of a signed bundle.
func ReadFile(text []byte) (Signed, error) {
	var s Signed
	decoder := json.NewDecoder(strings.NewReader(string(text)))
	decoder.DisallowUnknownFields()
	if err := decoder.Decode(&s); err != nil {
		return Signed{}, fmt.Errorf("bundle file: %w (a JSON object with bundle, signature and keys is expected)", err)
	}
	if s.Bundle == "" || s.Signature == "" {
		return Signed{}, errors.New("bundle file: bundle or signature is missing")
	}
	return s, nil
}
