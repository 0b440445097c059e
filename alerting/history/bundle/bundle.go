// Package bundle makes evidence of one event: a history.Store and the id of
// an event come in, a signed archive goes out that can be checked on another
// machine without the store.
//
// An archive is a zip file without compression whose every byte follows from
// the history, the options and the version of the program: the same export
// twice gives the same file. Its parts are named in parts; the last two are
// manifest.json, with the SHA-256 of each other part, and manifest.sig, the
// Ed25519 signature (RFC 8032) of the manifest. format.md of history says what
// each part holds.
//
// Next: cmd/sockline.
package bundle

import (
	"archive/zip"
	"bytes"
	"context"
	"crypto/ed25519"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/export"
	"sockline/sensors"
)

// Around is how much before the opening and after the closing of an event the
// readings reach.
const Around = 10 * time.Minute

// version is that of the archive's format.
const version = 1

// Options say how an archive is made.
type Options struct {
	Software string             // version of the program that makes it
	Key      ed25519.PrivateKey // signs it
	// Now is how far an event that is still open is shown; 0 is up to the last
	// stored step.
	Now sensors.Instant
	// RedactNames replaces what people are called, also within what they
	// wrote; RedactTexts withholds what they wrote. The chain still verifies.
	RedactNames, RedactTexts bool
}

// Summary is what an archive holds.
type Summary struct {
	Event    string   `json:"event"`
	From     string   `json:"from"` // of the readings, RFC 3339
	To       string   `json:"to"`
	Readings uint64   `json:"readings"`
	Issues   int      `json:"issues"`
	People   int      `json:"people"` // records of what people did
	Links    int      `json:"links"`  // records of the chain
	Kept     int      `json:"texts_kept,omitempty"`
	Damage   []string `json:"damage,omitempty"` // what could not be read
	Key      string   `json:"public_key"`
	SHA256   string   `json:"manifest_sha256"`
}

// parts are the names in an archive, in their order; configurations and
// tables are numbered by their record.
const (
	partRead     = "README.txt"
	partEvent    = "event.json"
	partIssues   = "issues.jsonl"
	partPeople   = "people.jsonl"
	partSoftware = "software.jsonl"
	partNotices  = "gaps-and-damage.jsonl"
	partReadings = "readings.csv"
	partSensors  = "sensors.json"
	partChain    = "journal/chain.jsonl"
	partHeads    = "journal/heads.json"
	partManifest = "manifest.json"
	partSig      = "manifest.sig"
)

// Write writes the archive of the event id to w.
func Write(ctx context.Context, w io.Writer, s *history.Store, id string, o Options) (Summary, error) {
	if len(o.Key) != ed25519.PrivateKeySize {
		return Summary{}, errors.New("an archive needs a key to sign it")
	}
	c, err := gather(s, id, o)
	if err != nil {
		return Summary{}, err
	}
	b := &builder{archive: zip.NewWriter(w), manifest: manifest{
		Bundle: version, Event: id, Software: o.Software, NamesRedacted: o.RedactNames, TextsRedacted: o.RedactTexts,
		Key: hex.EncodeToString(o.Key.Public().(ed25519.PublicKey)), Notice: alerting.Notice,
	}}
	sum := Summary{Event: id, Issues: len(c.event.Objects), Key: b.manifest.Key}
	sum.From, sum.To = c.from.String(), c.to.String()
	if err := c.write(ctx, b, s, &sum); err != nil {
		return sum, err
	}
	text, err := b.sign(o.Key)
	digest := sha256.Sum256(text)
	sum.SHA256 = hex.EncodeToString(digest[:])
	return sum, err
}

// write writes all parts but the manifest.
func (c *content) write(ctx context.Context, b *builder, s *history.Store, sum *Summary) error {
	b.text(partRead, c.readme())
	if c.redact != nil {
		sum.Kept = c.redact.apply(c.links)
	}
	b.part(partIssues, func(w io.Writer) error {
		for _, object := range c.event.Objects {
			if _, err := w.Write(slices.Concat(object, []byte{'\n'})); err != nil {
				return err
			}
		}
		return nil
	})
	c.records(b, sum)
	sensorsSeen := newSightings()
	b.part(partReadings, func(w io.Writer) error {
		table, err := export.New("csv", w)
		if err != nil {
			return err
		}
		found, err := export.Readings(ctx, s, c.from, c.to, sensorsSeen.watch(table), func(sensors.Instant) {})
		sum.Readings = found.Rows
		if found.Damage != nil {
			sum.Damage = append(sum.Damage, found.Damage.Error())
		}
		return err
	})
	b.json(partSensors, sensorsSeen.result(c.from, c.to))
	b.lines(partChain, len(c.links), func(i int) any { return c.links[i] })
	b.json(partHeads, c.heads())
	b.json(partEvent, c.about(sum))
	sum.Links = len(c.links)
	return b.err
}

// manifest names the parts. It is what is signed.
type manifest struct {
	Bundle        int    `json:"bundle"` // version of the format
	Event         string `json:"event"`
	Software      string `json:"software"`
	NamesRedacted bool   `json:"names_redacted"`
	TextsRedacted bool   `json:"texts_redacted"`
	Key           string `json:"public_key"` // Ed25519, hexadecimal
	Parts         []part `json:"parts"`
	Notice        string `json:"notice"`
}

type part struct {
	Name   string         `json:"name"`
	Size   int64          `json:"size"`
	SHA256 history.Digest `json:"sha256"`
}

// builder writes parts one after the other and keeps the first error.
type builder struct {
	archive  *zip.Writer
	manifest manifest
	err      error
}

// part writes one part and enters it in the manifest.
func (b *builder) part(name string, fn func(io.Writer) error) {
	if b.err != nil {
		return
	}
	// Neither time nor compression: what is in the file is what was put in.
	w, err := b.archive.CreateHeader(&zip.FileHeader{Name: name, Method: zip.Store})
	if err != nil {
		b.err = fmt.Errorf("write %s: %w", name, err)
		return
	}
	h := sha256.New()
	n := &counter{w: io.MultiWriter(w, h)}
	if err := fn(n); err != nil {
		b.err = fmt.Errorf("write %s: %w", name, err)
		return
	}
	p := part{Name: name, Size: n.n}
	copy(p.SHA256[:], h.Sum(nil))
	b.manifest.Parts = append(b.manifest.Parts, p)
}

type counter struct {
	w io.Writer
	n int64
}

// Write counts what it passes on.
func (c *counter) Write(p []byte) (int, error) {
	n, err := c.w.Write(p)
	c.n += int64(n)
	return n, err
}

func (b *builder) text(name, text string) {
	b.part(name, func(w io.Writer) error { _, err := io.WriteString(w, text); return err })
}

func (b *builder) json(name string, v any) {
	b.part(name, func(w io.Writer) error {
		text, err := indented(v)
		if err == nil {
			_, err = w.Write(text)
		}
		return err
	})
}

func (b *builder) lines(name string, n int, at func(int) any) {
	b.part(name, func(w io.Writer) error {
		for i := range n {
			text, err := compact(at(i))
			if err != nil {
				return err
			}
			if _, err := w.Write(text); err != nil {
				return err
			}
		}
		return nil
	})
}

func indented(v any) ([]byte, error) {
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false)
	e.SetIndent("", "  ")
	err := e.Encode(v)
	return b.Bytes(), err
}

func compact(v any) ([]byte, error) {
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false)
	err := e.Encode(v)
	return b.Bytes(), err
}

// sign ends the archive with the manifest and its signature.
func (b *builder) sign(key ed25519.PrivateKey) ([]byte, error) {
	if b.err != nil {
		return nil, b.err
	}
	text, err := indented(b.manifest)
	if err != nil {
		return nil, fmt.Errorf("write the manifest: %w", err)
	}
	b.part(partManifest, func(w io.Writer) error { _, err := w.Write(text); return err })
	b.text(partSig, hex.EncodeToString(ed25519.Sign(key, text))+"\n")
	if b.err == nil {
		b.err = b.archive.Close()
	}
	return text, b.err
}
