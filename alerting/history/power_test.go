package history

import (
	"bufio"
	"bytes"
	"encoding/hex"
	"fmt"
	"io"
	"maps"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"sockline/sensors"
)

// The power fails at any moment: strace records every write, sync, truncation
// and name that a writer makes in an empty directory, its first initialisation
// included. From that, disks are made as they may be found after a loss of
// power: all that was synced is there; of the rest, any part.

// sector is what a disk writes whole or not at all.
const sector = 512

// diskWrite is a write that no sync has covered yet; data nil is a new size.
type diskWrite struct {
	at   int64
	data []byte
}

// inode is a file of the model, with or without a name.
type inode struct {
	content []byte // durable
	pending []diskWrite
}

func (f *inode) apply(w diskWrite) {
	if w.data == nil {
		if w.at <= int64(len(f.content)) {
			f.content = f.content[:w.at]
		} else {
			f.content = append(f.content, make([]byte, w.at-int64(len(f.content)))...)
		}
		return
	}
	if end := w.at + int64(len(w.data)); end > int64(len(f.content)) {
		f.content = append(f.content, make([]byte, end-int64(len(f.content)))...)
	}
	copy(f.content[w.at:], w.data)
}

func (f *inode) sync() {
	for _, w := range f.pending {
		f.apply(w)
	}
	f.pending = nil
}

// naming is a change of a directory that no sync has covered yet.
type naming struct {
	name string
	file *inode // nil takes the name away
}

// disk is a directory of the model.
type disk struct {
	names, now map[string]*inode // durable, and as the program sees it
	pending    []naming
	fds        map[string]*inode
	dirs       map[string]bool // descriptors of the directory
	recorded   []sensors.Instant
}

func (d *disk) name(name string, f *inode) {
	d.pending = append(d.pending, naming{name, f})
	if f == nil {
		delete(d.now, name)
	} else {
		d.now[name] = f
	}
}

// call is one system call of the trace.
type call struct {
	name string
	args []string // strings decoded
	data []byte   // of a write
	ret  string
}

var callPattern = regexp.MustCompile(`^(\w+)\((.*)\)\s+= (-?\d+)`)

// parseTrace gives the calls in the order of their ends.
func parseTrace(t *testing.T, r io.Reader) []call {
	t.Helper()
	open := map[string]string{} // by thread: a call that is not over
	var calls []call
	lines := bufio.NewReaderSize(r, 1<<20)
	for {
		line, err := lines.ReadString('\n')
		if err == io.EOF {
			return calls
		}
		if err != nil {
			t.Fatal(err)
		}
		thread, text, _ := strings.Cut(strings.TrimSpace(line), " ")
		text = strings.TrimSpace(text)
		if begin, ok := strings.CutSuffix(text, " <unfinished ...>"); ok {
			open[thread] = begin
			continue
		}
		if strings.HasPrefix(text, "<... ") {
			_, rest, _ := strings.Cut(text, " resumed>")
			text = open[thread] + rest
		}
		m := callPattern.FindStringSubmatch(text)
		if m == nil {
			continue // a signal, an exit
		}
		c := call{name: m[1], ret: m[3]}
		for arg := range strings.SplitSeq(m[2], ", ") {
			if s, ok := strings.CutPrefix(arg, `"`); ok {
				b, err := hex.DecodeString(strings.ReplaceAll(strings.TrimSuffix(s, `"`), `\x`, ""))
				if err != nil {
					t.Fatalf("a call that cannot be read: %.80s: %v", text, err)
				}
				arg, c.data = string(b), b
			}
			c.args = append(c.args, arg)
		}
		calls = append(calls, c)
	}
}

// play takes a call into the model. dir is where the writer worked.
func (d *disk) play(t *testing.T, dir string, c call) {
	t.Helper()
	if strings.HasPrefix(c.ret, "-") {
		return
	}
	number := func(i int) int64 {
		n, err := strconv.ParseInt(c.args[i], 10, 64)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		return n
	}
	file, known := d.fds[c.args[0]]
	switch c.name {
	case "openat":
		delete(d.fds, c.ret)
		delete(d.dirs, c.ret)
		d.dirs[c.ret] = c.args[1] == dir
		if filepath.Dir(c.args[1]) != dir {
			return
		}
		name := filepath.Base(c.args[1])
		if d.now[name] == nil {
			d.name(name, &inode{})
		}
		d.fds[c.ret] = d.now[name]
	case "close":
		delete(d.fds, c.args[0])
		delete(d.dirs, c.args[0])
	case "pwrite64":
		if known {
			file.pending = append(file.pending, diskWrite{number(3), c.data[:atoi(c.ret)]})
		}
	case "ftruncate":
		if known {
			file.pending = append(file.pending, diskWrite{at: number(1)})
		}
	case "fdatasync", "fsync":
		if known {
			file.sync()
		} else if d.dirs[c.args[0]] {
			for _, n := range d.pending {
				if n.file == nil {
					delete(d.names, n.name)
				} else {
					d.names[n.name] = n.file
				}
			}
			d.pending = nil
		}
	case "linkat":
		d.name(filepath.Base(c.args[3]), d.now[filepath.Base(c.args[1])])
	case "renameat", "renameat2":
		from := filepath.Base(c.args[1])
		d.name(filepath.Base(c.args[3]), d.now[from])
		d.name(from, nil)
	case "unlinkat":
		if filepath.Dir(c.args[1]) == dir {
			d.name(filepath.Base(c.args[1]), nil)
		}
	case "write":
		if c.args[0] != "1" && known {
			t.Fatalf("a plain write to a file: the model does not know where it goes")
		}
		for line := range strings.SplitSeq(string(c.data), "\n") {
			if step, ok := strings.CutPrefix(line, "recorded "); c.args[0] == "1" && ok {
				d.recorded = append(d.recorded, sensors.Instant(atoi(step)))
			}
		}
	}
}

func atoi(s string) int { n, _ := strconv.Atoi(s); return n }

// found writes the disk as it may be found now into a directory: keep says of
// each thing that no sync covers whether it is there.
func (d *disk) found(t *testing.T, to string, keep func() bool) {
	t.Helper()
	names := maps.Clone(d.names)
	for _, n := range d.pending { // a file system keeps these in their order
		if !keep() {
			break
		}
		if n.file == nil {
			delete(names, n.name)
		} else {
			names[n.name] = n.file
		}
	}
	if err := os.MkdirAll(to, 0o700); err != nil {
		t.Fatal(err)
	}
	for name, f := range names {
		left := inode{content: slices.Clone(f.content)}
		for _, w := range f.pending {
			if w.data == nil {
				if keep() {
					left.apply(w)
				}
				continue
			}
			for at := 0; at < len(w.data); at += sector {
				if keep() {
					left.apply(diskWrite{w.at + int64(at), w.data[at:min(at+sector, len(w.data))]})
				}
			}
		}
		if err := os.WriteFile(filepath.Join(to, name), left.content, 0o600); err != nil {
			t.Fatal(err)
		}
	}
}

// traceOf records a writer that begins in an empty directory.
func traceOf(t *testing.T, dir string, steps int) []call {
	t.Helper()
	strace, err := exec.LookPath("strace")
	if err != nil {
		t.Skip("SKIPPED, NOT TESTED: strace is not installed")
	}
	if out, err := exec.Command(strace, "-o", os.DevNull, "true").CombinedOutput(); err != nil {
		t.Skipf("SKIPPED, NOT TESTED: no right to trace: %s", out)
	}
	log := filepath.Join(t.TempDir(), "trace")
	cmd := child(dir, steps, strace, "-f", "-qq", "-xx", "-s", "16777216", "-o", log,
		"-e", "trace=openat,close,pwrite64,write,fdatasync,fsync,ftruncate,linkat,renameat,renameat2,unlinkat")
	cmd.Env = append(cmd.Env, "HISTORY_TEST_WINDOW=10", "GOMAXPROCS=1")
	if out, err := cmd.Output(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	f, err := os.Open(log)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	return parseTrace(t, f)
}

func TestPowerLoss(t *testing.T) {
	steps, stride, drawn := 72, 13, 1 // crosses midnight
	if os.Getenv("SOCKLINE_LONG") != "" {
		steps, stride, drawn = 90, 1, 10
	}
	const seed = 47
	rng := rand.New(rand.NewPCG(seed, 0))
	dir, work := t.TempDir(), filepath.Join(t.TempDir(), "w")
	calls := traceOf(t, dir, steps)
	d := &disk{names: map[string]*inode{}, now: map[string]*inode{}, fds: map[string]*inode{}, dirs: map[string]bool{}}
	images, writes, syncs := 0, 0, 0
	for i, c := range calls {
		d.play(t, dir, c)
		switch c.name {
		case "pwrite64":
			writes++
		case "fdatasync", "fsync":
			syncs++
		case "openat", "close":
			continue
		}
		if i%stride != 0 && len(d.recorded) > 0 {
			continue // each moment of the first initialisation, and a part of the rest
		}
		keeps := []func() bool{func() bool { return false }, func() bool { return true }}
		for range drawn {
			share := rng.Float64()
			keeps = append(keeps, func() bool { return rng.Float64() < share })
		}
		for k, keep := range keeps {
			if err := os.RemoveAll(work); err != nil {
				t.Fatal(err)
			}
			d.found(t, work, keep)
			afterPowerLoss(t, work, d.recorded, fmt.Sprintf("seed %d, after call %d of %d (%s), disk %d", seed, i, len(calls), c.name, k))
			images++
		}
		if t.Failed() {
			return
		}
	}
	// The model must end with the files that the writer left.
	checked := 0
	for name, f := range d.now {
		f.sync()
		if b, err := os.ReadFile(filepath.Join(dir, name)); err != nil || !bytes.Equal(b, f.content) {
			t.Errorf("the model of %s is not the file that the writer left: %v", name, err)
		}
		checked++
	}
	if len(d.recorded) != steps/3 || checked < 3 || writes < 100 || syncs < 50 {
		t.Errorf("%d recorded, %d files, %d writes, %d syncs: the trace is not whole", len(d.recorded), checked, writes, syncs)
	}
	t.Logf("%d disks from %d calls, %d writes and %d syncs among them", images, len(calls), writes, syncs)
}

// afterPowerLoss opens a disk: it must open, without damage, and hold every
// issue that was told as recorded, and the readings up to it.
func afterPowerLoss(t *testing.T, dir string, recorded []sensors.Instant, what string) {
	t.Helper()
	s, err := Open(dir, Options{Log: zerolog.Nop()})
	if err != nil {
		t.Errorf("%s: %v", what, err)
		return
	}
	defer s.Close()
	if h := s.Health(); len(h.Damage) > 0 {
		t.Errorf("%s: damage %q", what, h.Damage)
	}
	issues := journalled(t, s)
	newest := sensors.Instant(0)
	for _, step := range recorded {
		if issues[step] != 1 {
			t.Errorf("%s: the issue of step %s, told as recorded, is there %d times", what, step, issues[step])
		}
		newest = max(newest, step)
	}
	want := start + sensors.Second
	err = s.Readings(0, 1<<50, func(st Step) error {
		if st.At != want || len(st.Readings) != 4*childStations {
			return fmt.Errorf("step %s with %d readings where %s should follow", st.At, len(st.Readings), want)
		}
		want += sensors.Second
		return nil
	})
	if err != nil || newest >= want {
		t.Errorf("%s: recorded up to %s, readings before %s: %v", what, newest, want, err)
	}
}
