package access

import (
	"crypto/rand"
	"crypto/subtle"
	"encoding/base64"
	"errors"
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"

	"golang.org/x/crypto/argon2"
)

// What a hash costs, and its sizes: argon2id of RFC 9106 with 19 MiB, two
// passes and one lane, the least that the OWASP password storage cheat sheet
// gives (from memory). A check takes some 20 ms.
const (
	hashMemory = 19 * 1024 // KiB
	hashPasses = 2
	hashLanes  = 1
	saltBytes  = 16
	keyBytes   = 32
)

// Bounds of what a file may ask for, so that it cannot make a check take
// minutes or all memory.
const (
	mostMemory = 256 * 1024 // KiB
	mostPasses = 16
	mostLanes  = 8
)

// The length of a password, in characters and in bytes.
const (
	leastPassword = 12
	mostPassword  = 512
)

// hash is a password as it is kept.
type hash struct {
	memory, passes uint32
	lanes          uint8
	salt, key      []byte
}

// newHash hashes a password under a new salt.
func newHash(password string) (hash, error) {
	h := hash{memory: hashMemory, passes: hashPasses, lanes: hashLanes, salt: make([]byte, saltBytes)}
	if _, err := rand.Read(h.salt); err != nil {
		return hash{}, fmt.Errorf("make up a salt: %w", err)
	}
	h.key = argon2.IDKey([]byte(password), h.salt, h.passes, h.memory, h.lanes, keyBytes)
	return h, nil
}

// is tells whether a password is the one of the hash, in a time that does not
// depend on how much of it is right.
func (h hash) is(password string) bool {
	key := argon2.IDKey([]byte(password), h.salt, h.passes, h.memory, h.lanes, uint32(len(h.key)))
	return subtle.ConstantTimeCompare(key, h.key) == 1
}

// String is the hash in the PHC string format.
func (h hash) String() string {
	enc := base64.RawStdEncoding
	return fmt.Sprintf("$argon2id$v=%d$m=%d,t=%d,p=%d$%s$%s",
		argon2.Version, h.memory, h.passes, h.lanes, enc.EncodeToString(h.salt), enc.EncodeToString(h.key))
}

// errHash is a text that is not a hash made here.
var errHash = errors.New("the hash is not one of argon2id as \"sockline users add\" writes it")

// parseHash reads a hash in the PHC string format.
func parseHash(s string) (hash, error) {
	parts := strings.Split(s, "$")
	if len(parts) != 6 || parts[0] != "" || parts[1] != "argon2id" || parts[2] != fmt.Sprintf("v=%d", argon2.Version) {
		return hash{}, errHash
	}
	var h hash
	if _, err := fmt.Sscanf(parts[3], "m=%d,t=%d,p=%d", &h.memory, &h.passes, &h.lanes); err != nil ||
		parts[3] != fmt.Sprintf("m=%d,t=%d,p=%d", h.memory, h.passes, h.lanes) {
		return hash{}, errHash
	}
	var err1, err2 error
	enc := base64.RawStdEncoding.Strict()
	h.salt, err1 = enc.DecodeString(parts[4])
	h.key, err2 = enc.DecodeString(parts[5])
	if err1 != nil || err2 != nil || len(h.salt) < 8 || len(h.salt) > 64 || len(h.key) < 16 || len(h.key) > 64 ||
		h.memory < 8*uint32(h.lanes) || h.memory > mostMemory || h.passes < 1 || h.passes > mostPasses || h.lanes < 1 || h.lanes > mostLanes {
		return hash{}, errHash
	}
	return h, nil
}

// CheckPassword refuses a password that is too short to keep anybody out.
func CheckPassword(name, password string) error {
	switch n := utf8.RuneCountInString(password); {
	case !utf8.ValidString(password) || strings.ContainsFunc(password, unicode.IsControl):
		return errors.New("the password holds characters that cannot be typed into a form")
	case n < leastPassword:
		return fmt.Errorf("the password has %d characters; use at least %d, some words in a row will do", n, leastPassword)
	case len(password) > mostPassword:
		return fmt.Errorf("the password has more than %d bytes", mostPassword)
	case strings.EqualFold(password, name), strings.Count(password, password[:1]) == len(password):
		return errors.New("the password is too easy to guess; some words in a row will do")
	}
	return nil
}
