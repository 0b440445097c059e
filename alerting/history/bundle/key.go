package bundle

import (
	"crypto/ed25519"
	"crypto/rand"
	"crypto/x509"
	"encoding/hex"
	"encoding/pem"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"strings"
)

// keyName is the file of the signing key in the history directory. It is not
// part of a backup: who has it can sign in the airfield's name.
const keyName = "signing.key"

// Key is the signing key of a history directory, made at its first use and
// readable by its owner only.
func Key(dir string) (ed25519.PrivateKey, error) {
	path := filepath.Join(dir, keyName)
	key, err := readKey(path)
	if !errors.Is(err, os.ErrNotExist) {
		return key, err
	}
	if err := makeKey(path); err != nil {
		return nil, fmt.Errorf("make the signing key: %w", err)
	}
	return readKey(path) // another process may have been first
}

func readKey(path string) (ed25519.PrivateKey, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, fmt.Errorf("read the signing key: %w", err)
	}
	if mode := info.Mode().Perm(); mode&0o077 != 0 && runtime.GOOS != "windows" {
		return nil, fmt.Errorf("the signing key %s can be read by others (mode %v): chmod 600 it, and make a new one if somebody may have", path, mode)
	}
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("read the signing key: %w", err)
	}
	block, _ := pem.Decode(text)
	if block == nil {
		return nil, fmt.Errorf("the signing key %s is not a PEM file: put back the right one, or delete it and a new one is made", path)
	}
	parsed, err := x509.ParsePKCS8PrivateKey(block.Bytes)
	if err != nil {
		return nil, fmt.Errorf("the signing key %s: %w", path, err)
	}
	key, ok := parsed.(ed25519.PrivateKey)
	if !ok {
		return nil, fmt.Errorf("the signing key %s is not an Ed25519 key", path)
	}
	return key, nil
}

// makeKey writes a new key under another name and links it to its own, so
// that there is never half a key, nor a second one over the first.
func makeKey(path string) error {
	_, key, err := ed25519.GenerateKey(rand.Reader)
	if err != nil {
		return err
	}
	der, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		return err
	}
	tmp, err := os.CreateTemp(filepath.Dir(path), keyName+".*.new") // mode 0600
	if err != nil {
		return err
	}
	defer os.Remove(tmp.Name())
	err = pem.Encode(tmp, &pem.Block{Type: "PRIVATE KEY", Bytes: der})
	if err = errors.Join(err, tmp.Sync(), tmp.Close()); err != nil {
		return err
	}
	if err := os.Link(tmp.Name(), path); err != nil && !errors.Is(err, fs.ErrExist) {
		return os.Rename(tmp.Name(), path) // a file system without links
	}
	return nil
}

// ParseKey reads a public key: 64 hexadecimal digits.
func ParseKey(text string) (ed25519.PublicKey, error) {
	b, err := hex.DecodeString(strings.TrimSpace(text))
	if err != nil || len(b) != ed25519.PublicKeySize {
		return nil, fmt.Errorf("%q is not a public key: it has %d hexadecimal digits", text, 2*ed25519.PublicKeySize)
	}
	return b, nil
}
