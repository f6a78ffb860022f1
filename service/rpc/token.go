package rpc

import (
	"encoding/base64"
	"encoding/hex"
	"strings"

	"crypto/sha256"
)

// A token tells a list or a watch where to go on. To its holder it is opaque; it names its call, a fingerprint of the filters that it
// belongs to, and a position. It is no secret and carries no right: whoever may make the call may read from any position.
//
//	token = base64url( call "\n" fingerprint "\n" position )

// makeToken returns the token of a position; filters are what the next call must repeat.
func makeToken(call, filters, position string) string {
	return base64.RawURLEncoding.EncodeToString([]byte(call + "\n" + fingerprint(filters) + "\n" + position))
}

// readToken returns the position of a token, "" of none at all.
func readToken(field, token, call, filters string) (position string, err error) {
	if token == "" {
		return "", nil
	}
	text, err := base64.RawURLEncoding.DecodeString(token)
	if err != nil || len(token) > 1024 {
		return "", malformed(field, "want a token as it was given, got another text of %d bytes", len(token))
	}
	parts := strings.SplitN(string(text), "\n", 3)
	if len(parts) != 3 || parts[0] != call || parts[2] == "" {
		return "", malformed(field, "want a token of this call as it was given, got another text")
	}
	if parts[1] != fingerprint(filters) {
		return "", malformed(field, "want the filters with which the token was given, got others")
	}
	return parts[2], nil
}

func fingerprint(filters string) string {
	sum := sha256.Sum256([]byte(filters))
	return hex.EncodeToString(sum[:8])
}

// pageSize returns how many entries a page may have.
func pageSize(asked int32) (int, error) {
	switch {
	case asked < 0 || asked > MaxPage:
		return 0, malformed("page_size", "want 1 to %d, or 0 for 100, got %d", MaxPage, asked)
	case asked == 0:
		return 100, nil
	}
	return int(asked), nil
}
