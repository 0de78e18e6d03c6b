package bundle

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/sha256"
	"crypto/x509"
	"encoding/base64"
	"encoding/json"
	"errors"
	"fmt"
)

// PublicKey is an ES256 public key as a JSON Web Key (RFC 7517).
type PublicKey struct {
	KeyType string `json:"kty"`
	Curve   string `json:"crv"`
	X       string `json:"x"`
	Y       string `json:"y"`
	ID      string `json:"kid"`
	Alg     string `json:"alg"`
	Use     string `json:"use"`
}

// KeySet is a JSON Web Key Set: current and old public keys.
type KeySet struct {
	Keys []PublicKey `json:"keys"`
}

// ErrUnknownKey says that a signature names a key that is not in the set.
var ErrUnknownKey = errors.New("signed with a key that is not in the key set")

// Find returns the key called id, ready to verify with.
func (s KeySet) Find(id string) (*ecdsa.PublicKey, error) {
	for _, k := range s.Keys {
		if k.ID == id {
			return k.ECDSA()
		}
	}
	return nil, fmt.Errorf("key %q: %w", id, ErrUnknownKey)
}

// ECDSA converts the key, refusing other curves and points off the curve.
func (k PublicKey) ECDSA() (*ecdsa.PublicKey, error) {
	if k.KeyType != "EC" || k.Curve != "P-256" {
		return nil, fmt.Errorf("key %q is %s %s: EC P-256 is needed for ES256", k.ID, k.KeyType, k.Curve)
	}
	x, err := coordinate(k.X)
	if err != nil {
		return nil, fmt.Errorf("key %q, x: %w", k.ID, err)
	}
	y, err := coordinate(k.Y)
	if err != nil {
		return nil, fmt.Errorf("key %q, y: %w", k.ID, err)
	}
	pub, err := ecdsa.ParseUncompressedPublicKey(elliptic.P256(), append(append([]byte{4}, x...), y...))
	if err != nil {
		return nil, fmt.Errorf("key %q: %w", k.ID, err)
	}
	return pub, nil
}

func coordinate(s string) ([]byte, error) {
	b, err := base64.RawURLEncoding.DecodeString(s)
	if err != nil {
		return nil, err
	}
	if len(b) != 32 {
		return nil, fmt.Errorf("%d bytes: 32 are needed", len(b))
	}
	return b, nil
}

// Key is a signing key with its public half and identifier.
type Key struct {
	Private *ecdsa.PrivateKey
	Public  PublicKey
}

// NewKey makes a fresh ES256 key from the system's random source.
func NewKey() (Key, error) {
	private, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		return Key{}, fmt.Errorf("make signing key: %w", err)
	}
	return keyOf(private)
}

// ParseKey reads a key written by Key.Marshal (PKCS #8, DER).
func ParseKey(der []byte) (Key, error) {
	parsed, err := x509.ParsePKCS8PrivateKey(der)
	if err != nil {
		return Key{}, fmt.Errorf("read signing key: %w", err)
	}
	private, ok := parsed.(*ecdsa.PrivateKey)
	if !ok || private.Curve != elliptic.P256() {
		return Key{}, errors.New("read signing key: it is not an ECDSA P-256 key")
	}
	return keyOf(private)
}

// Marshal writes the private key (PKCS #8, DER). It is a secret.
func (k Key) Marshal() ([]byte, error) { return x509.MarshalPKCS8PrivateKey(k.Private) }

func keyOf(private *ecdsa.PrivateKey) (Key, error) {
	point, err := private.PublicKey.Bytes()
	if err != nil {
		return Key{}, err
	}
	public := PublicKey{
		KeyType: "EC", Curve: "P-256", Alg: "ES256", Use: "sig",
		X: base64.RawURLEncoding.EncodeToString(point[1:33]),
		Y: base64.RawURLEncoding.EncodeToString(point[33:65]),
	}
	public.ID = public.thumbprint()
	return Key{Private: private, Public: public}, nil
}

// thumbprint is the key's identifier (RFC 7638: SHA-256 over the required
// members in lexicographic order).
func (k PublicKey) thumbprint() string {
	text, _ := json.Marshal(struct {
		Crv string `json:"crv"`
		Kty string `json:"kty"`
		X   string `json:"x"`
		Y   string `json:"y"`
	}{k.Curve, k.KeyType, k.X, k.Y})
	sum := sha256.Sum256(text)
	return base64.RawURLEncoding.EncodeToString(sum[:])
}
