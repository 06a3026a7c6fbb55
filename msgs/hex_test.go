package msgs

import (
	"encoding/hex"
	"strings"
	"testing"
)

// hexLines writes bytes as lines of 32.
func hexLines(b []byte) string {
	var s strings.Builder
	for len(b) > 0 {
		n := min(32, len(b))
		s.WriteString(hex.EncodeToString(b[:n]) + "\n")
		b = b[n:]
	}
	return s.String()
}

func unhex(t *testing.T, s string) []byte {
	t.Helper()
	b, err := hex.DecodeString(strings.ReplaceAll(s, "\n", ""))
	if err != nil {
		t.Fatal(err)
	}
	return b
}
