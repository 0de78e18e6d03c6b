package site

import (
	"context"
	"crypto/aes"
	"crypto/cipher"
	"crypto/rand"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"time"

	"github.com/google/uuid"

	"distal/server/bundle"
	"distal/server/store"
)

// Secret seals private keys at rest (AES-256-GCM).
type Secret struct{ aead cipher.AEAD }

// OpenSecret reads the server's secret from a file, making it the first time.
func OpenSecret(path string) (*Secret, error) {
	key, err := os.ReadFile(path)
	if errors.Is(err, os.ErrNotExist) {
		key = make([]byte, 32)
		rand.Read(key)
		if err := os.MkdirAll(filepath.Dir(path), 0o711); err != nil {
			return nil, err
		}
		err = os.WriteFile(path, key, 0o600)
	}
	if err != nil {
		return nil, fmt.Errorf("server secret: %w", err)
	}
	if len(key) != 32 {
		return nil, fmt.Errorf("server secret %s has %d bytes: 32 are needed", path, len(key))
	}
	block, err := aes.NewCipher(key)
	if err != nil {
		return nil, err
	}
	aead, err := cipher.NewGCM(block)
	return &Secret{aead}, err
}

// Seal encrypts a private key.
func (s *Secret) Seal(plain []byte) ([]byte, error) {
	nonce := make([]byte, s.aead.NonceSize())
	rand.Read(nonce)
	return s.aead.Seal(nonce, nonce, plain, nil), nil
}

func (s *Secret) open(sealed []byte) ([]byte, error) {
	n := s.aead.NonceSize()
	if len(sealed) < n {
		return nil, errors.New("a sealed key is too short")
	}
	plain, err := s.aead.Open(nil, sealed[:n], sealed[n:], nil)
	if err != nil {
		return nil, errors.New("a private key cannot be unsealed: is this the secret that it was sealed with?")
	}
	return plain, nil
}

// Ring gives the labs' keys, remembering them for a minute.
type Ring struct {
	Store  *store.Store
	Secret *Secret
	Now    func() time.Time

	mu     sync.Mutex
	cached map[uuid.UUID]cachedKeys
}

type cachedKeys struct {
	signing bundle.Key
	public  bundle.KeySet
	until   time.Time
}

// SigningKey is the lab's newest key.
func (r *Ring) SigningKey(ctx context.Context, lab uuid.UUID) (bundle.Key, error) {
	k, err := r.find(ctx, lab)
	return k.signing, err
}

// PublicKeys are all of the lab's public keys.
func (r *Ring) PublicKeys(ctx context.Context, lab uuid.UUID) (bundle.KeySet, error) {
	k, err := r.find(ctx, lab)
	return k.public, err
}

func (r *Ring) find(ctx context.Context, lab uuid.UUID) (cachedKeys, error) {
	r.mu.Lock()
	k, ok := r.cached[lab]
	r.mu.Unlock()
	if ok && r.Now().Before(k.until) {
		return k, nil
	}
	sealed, public, err := r.Store.FindKeys(ctx, lab)
	if err != nil {
		return cachedKeys{}, err
	}
	der, err := r.Secret.open(sealed)
	if err != nil {
		return cachedKeys{}, err
	}
	signing, err := bundle.ParseKey(der)
	if err != nil {
		return cachedKeys{}, err
	}
	k = cachedKeys{signing, public, r.Now().Add(time.Minute)}
	r.mu.Lock()
	if r.cached == nil {
		r.cached = map[uuid.UUID]cachedKeys{}
	}
	r.cached[lab] = k
	r.mu.Unlock()
	return k, nil
}
