package dcmobj

import (
	"crypto/sha256"
	"fmt"
	"math/big"
	"strings"
)

// UID returns a unique identifier that is a function of its parts: 2.25 and the
// decimal value of an RFC 9562 version-8 UUID made of their SHA-256.
// Source: DICOM PS3.5 B.2; RFC 9562 5.8.
func UID(parts ...string) string {
	h := sha256.New()
	for _, p := range parts {
		fmt.Fprintf(h, "%d:%s\n", len(p), p) // lengths keep the parts apart
	}
	u := h.Sum(nil)[:16]
	u[6] = u[6]&0x0f | 0x80
	u[8] = u[8]&0x3f | 0x80
	return "2.25." + new(big.Int).SetBytes(u).String()
}

// validUID checks the form of a UID (PS3.5 9.1).
func validUID(s string) error {
	if len(s) == 0 || len(s) > 64 {
		return fmt.Errorf("%q: %d characters: want 1..64", s, len(s))
	}
	for c := range strings.SplitSeq(s, ".") {
		if c == "" || len(c) > 1 && c[0] == '0' || strings.Trim(c, "0123456789") != "" {
			return fmt.Errorf("%q: component %q: want digits without leading zeros", s, c)
		}
	}
	return nil
}
