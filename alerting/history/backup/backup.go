// Package backup copies a history: a history.Store, or the stream that a
// daemon made of its own, comes in, a checked copy with a list of SHA-256 goes
// out, as a directory or as one tar file. A copy is itself a history
// directory; to restore is to put it in place.
//
// The signing key is in no copy: who has it can sign in the airfield's name.
//
// Next: cmd/sockline.
package backup

import (
	"archive/tar"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
)

// The files that a copy has beside those of the history.
const (
	sumsName   = "SHA256SUMS"
	noticeName = "NOTICE.txt"
	// endName is the last entry of a stream: without it the stream is cut.
	endName = "end-of-history"
)

// File is one file of a copy.
type File struct {
	Name   string `json:"name"`
	Size   int64  `json:"size"`
	SHA256 string `json:"sha256"`
}

// Result is what a copy holds.
type Result struct {
	Out    string         `json:"out"`
	Files  []File         `json:"files"`
	Bytes  int64          `json:"bytes"`
	Report history.Report `json:"report"` // of the copy, opened and read through
	Damage string         `json:"damage,omitempty"`
	Notice string         `json:"notice"`
}

// Span bounds the days of readings in a copy; the journal is always whole. 0
// is no bound.
type Span struct{ From, To sensors.Instant }

// Nothing is a span that no day lies in.
func Nothing() Span { return Span{From: 1, To: -1} }

// wants reports whether a day, written as 2006-01-02, touches the span.
func (p Span) wants(day string) bool {
	dayOf := func(at sensors.Instant) string { return at.Time().Format(time.DateOnly) }
	return (p.From == 0 || day >= dayOf(p.From)) && (p.To == 0 || day <= dayOf(p.To))
}

// Stream writes a copy of the store as a tar stream, with the days that the
// span touches. It may be used while a Writer is at work.
func Stream(ctx context.Context, s *history.Store, span Span, w io.Writer) error {
	t := tar.NewWriter(w)
	n := 0
	err := s.Snapshot(ctx, span.wants, func(name string, size int64, content func(io.Writer) error) error {
		n++
		if err := t.WriteHeader(header(name, size)); err != nil {
			return err
		}
		return content(t)
	})
	if err != nil {
		return err
	}
	text := fmt.Sprintf("{\"files\":%d}\n", n)
	if err := t.WriteHeader(header(endName, int64(len(text)))); err != nil {
		return err
	}
	if _, err := io.WriteString(t, text); err != nil {
		return err
	}
	return t.Close()
}

func header(name string, size int64) *tar.Header {
	return &tar.Header{Typeflag: tar.TypeReg, Name: name, Size: size, Mode: 0o640, ModTime: time.Unix(0, 0)}
}

// Receive makes the copy out from a stream: a directory, or a tar file if out
// ends in .tar. It is made beside out under another name, read back, checked,
// synced and then given its name; out must not exist. wrote is told of each
// stretch of bytes. A copy of damaged files is kept: Result.Damage says so.
func Receive(r io.Reader, out string, wrote func(int)) (res Result, err error) {
	out = filepath.Clean(out)
	if _, err := os.Lstat(out); err == nil {
		return res, fmt.Errorf("%s exists: a copy never replaces another; name one that does not exist", out)
	}
	tmp, err := os.MkdirTemp(filepath.Dir(out), "."+filepath.Base(out)+".*.new")
	if err != nil {
		return res, fmt.Errorf("make the copy: %w", err)
	}
	defer func() { err = errors.Join(err, os.RemoveAll(tmp)) }() // after the renaming there is none
	dir := filepath.Join(tmp, "history")
	if err := os.Mkdir(dir, 0o750); err != nil {
		return res, fmt.Errorf("make the copy: %w", err)
	}
	res = Result{Out: out, Notice: alerting.Notice}
	if err := res.unpack(r, dir, wrote); err != nil {
		return res, fmt.Errorf("make the copy %s: %w", out, err)
	}
	if err := res.check(dir); err != nil {
		return res, fmt.Errorf("read back the copy %s: %w", out, err)
	}
	if err := res.list(dir); err != nil {
		return res, fmt.Errorf("make the copy %s: %w", out, err)
	}
	whole := dir
	if strings.HasSuffix(out, ".tar") {
		whole = filepath.Join(tmp, "history.tar")
		if err := pack(dir, whole); err != nil {
			return res, fmt.Errorf("make the copy %s: %w", out, err)
		}
	}
	if err := os.Rename(whole, out); err != nil {
		return res, fmt.Errorf("make the copy: %w", err)
	}
	return res, syncPath(filepath.Dir(out))
}

// Unpack writes the files of a stream into dir, which must exist: for a look
// at them, without the checks of Receive.
func Unpack(r io.Reader, dir string) error {
	return (&Result{}).unpack(r, dir, func(int) {})
}

// unpack writes the files of a stream.
func (res *Result) unpack(r io.Reader, dir string, wrote func(int)) error {
	for t := tar.NewReader(r); ; {
		h, err := t.Next()
		if err != nil {
			if errors.Is(err, io.EOF) {
				err = io.ErrUnexpectedEOF
			}
			return fmt.Errorf("the stream is cut off: %w", err)
		}
		if h.Name == endName {
			var end struct{ Files int }
			if err := json.NewDecoder(t).Decode(&end); err != nil || end.Files != len(res.Files) {
				return fmt.Errorf("the stream holds %d files and says %d", len(res.Files), end.Files)
			}
			return nil
		}
		if h.Typeflag != tar.TypeReg || h.Name != filepath.Base(h.Name) || strings.HasPrefix(h.Name, ".") {
			return fmt.Errorf("the stream holds %q, which is no file of a history", h.Name)
		}
		sum := sha256.New()
		err = writeFile(filepath.Join(dir, h.Name), func(f *os.File) error {
			_, err := io.Copy(io.MultiWriter(f, sum, counting(wrote)), t)
			if errors.Is(err, io.ErrUnexpectedEOF) {
				err = fmt.Errorf("the stream is cut off: %w", err)
			}
			return err
		})
		if err != nil {
			return err
		}
		res.Files = append(res.Files, File{Name: h.Name, Size: h.Size, SHA256: hex.EncodeToString(sum.Sum(nil))})
		res.Bytes += h.Size
	}
}

type counting func(int)

// Write tells how much passed.
func (c counting) Write(p []byte) (int, error) { c(len(p)); return len(p), nil }

// writeFile makes a file that is on disk when it returns.
func writeFile(path string, fill func(*os.File) error) error {
	f, err := os.OpenFile(path, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o640)
	if err != nil {
		return err
	}
	if err := fill(f); err != nil {
		return errors.Join(err, f.Close())
	}
	return errors.Join(f.Sync(), f.Close())
}

// check reads every file back, and the copy as a history.
func (res *Result) check(dir string) error {
	for _, f := range res.Files {
		sum, err := sumOf(filepath.Join(dir, f.Name))
		if err != nil {
			return err
		}
		if sum != f.SHA256 {
			return fmt.Errorf("%s comes back from the disk as something else: check the disk", f.Name)
		}
	}
	s, err := history.ReadOnly(dir)
	if err == nil {
		res.Report, err = s.Verify()
		err = errors.Join(err, s.Close())
	}
	switch {
	case err != nil:
		res.Damage = err.Error()
	case !res.Report.OK():
		res.Damage = "it does not verify; \"sockline history verify\" names what is damaged"
	}
	return nil
}

func sumOf(path string) (string, error) {
	f, err := os.Open(path)
	if err != nil {
		return "", err
	}
	defer f.Close()
	h := sha256.New()
	if _, err := io.Copy(h, f); err != nil {
		return "", err
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}

// list adds the notice and the list of SHA-256, as "sha256sum -c" reads it.
func (res *Result) list(dir string) error {
	text := alerting.Notice + "\n"
	sum := sha256.Sum256([]byte(text))
	res.Files = append(res.Files, File{Name: noticeName, Size: int64(len(text)), SHA256: hex.EncodeToString(sum[:])})
	err := writeFile(filepath.Join(dir, noticeName), func(f *os.File) error {
		_, err := f.WriteString(text)
		return err
	})
	if err != nil {
		return err
	}
	err = writeFile(filepath.Join(dir, sumsName), func(f *os.File) error {
		for _, file := range res.Files {
			if _, err := fmt.Fprintf(f, "%s  %s\n", file.SHA256, file.Name); err != nil {
				return err
			}
		}
		return nil
	})
	return errors.Join(err, syncPath(dir))
}

// pack makes one tar file of a directory.
func pack(dir, out string) error {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return err
	}
	return writeFile(out, func(f *os.File) error {
		t := tar.NewWriter(f)
		for _, e := range entries {
			if err := add(t, filepath.Join(dir, e.Name())); err != nil {
				return err
			}
		}
		return t.Close()
	})
}

func add(t *tar.Writer, path string) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return err
	}
	if err := t.WriteHeader(header(filepath.Base(path), info.Size())); err != nil {
		return err
	}
	_, err = io.Copy(t, f)
	return err
}

// syncPath makes a directory's entries durable. Some systems cannot; the
// files themselves are synced in any case.
func syncPath(dir string) error {
	f, err := os.Open(dir)
	if err != nil {
		return err
	}
	_ = f.Sync()
	return f.Close()
}
