package bundle

import (
	"archive/zip"
	"bytes"
	"crypto/ed25519"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strings"

	"sockline/alerting"
	"sockline/alerting/history"
)

// maxPart bounds the parts that are read into memory.
const maxPart = 256 << 20

// Report is what Verify found.
type Report struct {
	Event    string         `json:"event"`
	Software string         `json:"software"` // that made it
	Parts    int            `json:"parts"`
	Records  int            `json:"records"` // of the journal
	Shown    int            `json:"shown"`   // with their content
	Withheld int            `json:"withheld"`
	Heads    []history.Head `json:"heads"` // of days, to compare with what was published
	End      history.Head   `json:"end"`
	Key      string         `json:"public_key"`
	Trusted  bool           `json:"trusted"` // the key is the one that was given
	Faults   []string       `json:"faults"`  // empty: it is as it was made
	Notice   string         `json:"notice"`
}

// OK reports whether nothing is wrong.
func (r Report) OK() bool { return len(r.Faults) == 0 }

// Verify checks an archive by itself: every byte of the file, the digest of
// each part, the signature, each link of the chain, and that the parts say
// what the chain says. With a trusted key, the signature must be by that one.
// The error is for what is no archive at all.
func Verify(r io.ReaderAt, size int64, trusted ed25519.PublicKey) (Report, error) {
	z, err := zip.NewReader(r, size)
	if err != nil {
		return Report{}, fmt.Errorf("this is not an archive of an event, or it is cut short: %w", err)
	}
	v := &verifier{zip: z, text: map[string][]byte{}}
	v.Notice = alerting.Notice
	v.Faults = []string{}
	v.read()
	if _, ok := v.text[partManifest]; !ok {
		return v.Report, fmt.Errorf("this is not an archive of an event: it has no %s", partManifest)
	}
	v.bytes(r, size)
	if err := v.manifest(trusted); err != nil {
		return v.Report, err
	}
	v.chain()
	v.agree()
	return v.Report, nil
}

type verifier struct {
	Report
	zip   *zip.Reader
	text  map[string][]byte // of the parts, but the readings
	sizes map[string]int64
	sums  map[string]history.Digest
	links []history.Link
	m     manifest
}

func (v *verifier) fault(format string, args ...any) {
	v.Faults = append(v.Faults, fmt.Sprintf(format, args...))
}

// read takes in every part; the readings are only summed up.
func (v *verifier) read() {
	v.sums, v.sizes = map[string]history.Digest{}, map[string]int64{}
	for _, f := range v.zip.File {
		if _, twice := v.sums[f.Name]; twice {
			v.fault("%s is in it twice", f.Name)
			continue
		}
		h := sha256.New()
		var kept bytes.Buffer
		var to io.Writer = h
		if f.Name != partReadings && f.UncompressedSize64 <= maxPart {
			to = io.MultiWriter(h, &kept)
		}
		in, err := f.Open()
		if err == nil {
			v.sizes[f.Name], err = io.Copy(to, in)
			err = errors.Join(err, in.Close())
		}
		if err != nil {
			v.fault("%s cannot be read: %v", f.Name, err)
		}
		var sum history.Digest
		copy(sum[:], h.Sum(nil))
		v.sums[f.Name], v.text[f.Name] = sum, kept.Bytes()
	}
}

// bytes makes the file again from its parts and compares: nothing may be
// hidden between them, before or behind.
func (v *verifier) bytes(r io.ReaderAt, size int64) {
	same := &comparison{r: io.NewSectionReader(r, 0, size)}
	again := zip.NewWriter(same)
	for _, f := range v.zip.File {
		w, err := again.CreateHeader(&zip.FileHeader{Name: f.Name, Method: zip.Store})
		if err != nil {
			v.fault("%s: %v", f.Name, err)
			return
		}
		in, err := f.Open()
		if err == nil {
			_, err = io.Copy(w, in)
			err = errors.Join(err, in.Close())
		}
		if err != nil && !errors.Is(err, errDiffers) {
			return // told by read
		}
		if err != nil {
			break
		}
	}
	err := again.Close()
	if rest, _ := io.Copy(io.Discard, same.r); err != nil || rest > 0 {
		v.fault("the file is not byte for byte what was made: its frame was changed, or something stands between or behind the parts")
	}
}

var errDiffers = errors.New("the files differ")

// comparison is a writer that fails where what is written differs from r.
type comparison struct{ r io.Reader }

// Write compares.
func (c *comparison) Write(p []byte) (int, error) {
	b := make([]byte, len(p))
	if _, err := io.ReadFull(c.r, b); err != nil || !bytes.Equal(b, p) {
		return 0, errDiffers
	}
	return len(p), nil
}

// manifest checks the signature and the digest of every part.
func (v *verifier) manifest(trusted ed25519.PublicKey) error {
	text := v.text[partManifest]
	if err := json.Unmarshal(text, &v.m); err != nil {
		v.fault("%s: %v", partManifest, err)
		return nil
	}
	if v.m.Bundle != version {
		return fmt.Errorf("this archive has the format %d, this version reads %d: use the version that made it (%s)", v.m.Bundle, version, v.m.Software)
	}
	v.Event, v.Software, v.Key = v.m.Event, v.m.Software, v.m.Key
	key, err := ParseKey(v.m.Key)
	sig, sigErr := hex.DecodeString(strings.TrimSuffix(string(v.text[partSig]), "\n"))
	switch {
	case err != nil:
		v.fault("%s: %v", partManifest, err)
	case sigErr != nil || !ed25519.Verify(key, text, sig):
		v.fault("the signature does not belong to %s", partManifest)
	case trusted != nil && !key.Equal(trusted):
		v.fault("it is signed by the key %s, not by the one that was given", v.m.Key)
	default:
		v.Trusted = trusted != nil
	}
	listed := map[string]bool{partManifest: true, partSig: true}
	for _, p := range v.m.Parts {
		if listed[p.Name] = true; v.sums[p.Name] != p.SHA256 || v.sizes[p.Name] != p.Size {
			v.fault("%s is missing or not as it was signed", p.Name)
		}
	}
	for _, f := range v.zip.File {
		if v.Parts++; !listed[f.Name] {
			v.fault("%s is not named in %s", f.Name, partManifest)
		}
	}
	return nil
}

// chain follows the journal from record to record.
func (v *verifier) chain() {
	var h chainHeads
	if err := json.Unmarshal(v.text[partHeads], &h); err != nil {
		v.fault("%s: %v", partHeads, err)
		return
	}
	before, seq := h.Before, h.First
	if h.First == 1 && before != (history.Digest{}) {
		v.fault("%s: nothing can come before the first record", partHeads)
	}
	d := json.NewDecoder(bytes.NewReader(v.text[partChain]))
	for d.More() {
		var l history.Link
		if err := d.Decode(&l); err != nil {
			v.fault("%s: after record %d: %v", partChain, seq, err)
			return
		}
		if l.Seq != seq {
			v.fault("%s: record %d is missing", partChain, seq)
			return
		}
		if err := l.Check(before); err != nil {
			v.fault("%s: %v", partChain, err)
		}
		if v.Records++; l.Shown() {
			v.Shown++
		}
		for _, w := range l.Words {
			if w.Withheld {
				v.Withheld++
			}
		}
		v.links = append(v.links, l)
		before, seq = l.Hash, l.Seq+1
	}
	days, end := history.HeadsOf(v.links)
	a, _ := json.Marshal(days)
	b, _ := json.Marshal(h.Days)
	if end != h.End || string(a) != string(b) && len(days)+len(h.Days) > 0 {
		v.fault("%s does not say where the chain stands", partHeads)
	}
	v.Heads, v.End = days, end
}

// agree checks that the parts for reading say what the chain says.
func (v *verifier) agree() {
	for _, name := range []string{partPeople, partSoftware, partNotices} {
		all, err := saidBy(v.links, name)
		if err != nil {
			continue // told by the chain
		}
		var want []byte
		for _, s := range all {
			text, err := compact(s)
			if err != nil {
				v.fault("%s: %v", name, err)
			}
			want = append(want, text...)
		}
		if !bytes.Equal(want, v.text[name]) {
			v.fault("%s does not say what the journal says", name)
		}
	}
	names, files := filesOf(v.links)
	for i, name := range names {
		if !bytes.Equal(files[i], v.text[name]) {
			v.fault("%s is not the one in the journal", name)
		}
	}
	var issues []byte
	for _, l := range v.links {
		if l.Kind != history.KindIssue || !l.Shown() {
			continue
		}
		payload, _, err := l.Payload()
		if err != nil {
			continue
		}
		is, err := history.Record{Seq: l.Seq, Kind: l.Kind, Payload: payload}.Issue()
		if err != nil || is.Alert.ID == v.Event {
			issues = append(append(issues, is.Object...), '\n')
		}
	}
	if !bytes.Equal(issues, v.text[partIssues]) {
		v.fault("%s does not say what the journal says", partIssues)
	}
	if len(issues) == 0 {
		v.fault("the journal in it has no issue of event %s", v.Event)
	}
}
