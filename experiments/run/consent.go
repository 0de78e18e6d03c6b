//go:build !wasip1

package run

import (
	"crypto/sha256"
	"encoding/hex"

	"distal/experiments/study"
)

// ConsentDigest identifies exactly what was agreed to: the SHA-256, in
// hexadecimal, of the information text, a line feed and the consent text.
func ConsentDigest(t *study.TextSet) string {
	sum := sha256.Sum256([]byte(t.Information + "\n" + t.Consent))
	return hex.EncodeToString(sum[:])
}
