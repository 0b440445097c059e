package mosquitto_test

import (
	"bufio"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"
)

// running is sockline itself, as installed, behind the shipped broker.
type running struct {
	page string
	said *said
}

// run builds sockline and lets it observe Skerry Moor over mqtts, by its own
// certificate.
func run(t *testing.T, b *shippedBroker) running {
	t.Helper()
	dir := t.TempDir()
	binary := filepath.Join(dir, "sockline")
	if out, err := exec.Command("go", "build", "-o", binary, "sockline/cmd/sockline").CombinedOutput(); err != nil {
		t.Fatalf("build sockline: %v\n%s", err, out)
	}
	text, err := os.ReadFile("../../testdata/airfields/skerrymoor.toml")
	if err != nil {
		t.Fatal(err)
	}
	as := b.certified("sockline")
	page := "127.0.0.1:" + freePort(t)
	broker := fmt.Sprintf("url = %q\nca_file = %q\ncert_file = %q\nkey_file = %q\n#", as.URL, as.CAFile, as.CertFile, as.KeyFile)
	config := strings.NewReplacer(`url = "embedded://127.0.0.1:1883"`, broker, "./sockline-data", filepath.Join(dir, "history"), "127.0.0.1:7625", page).Replace(string(text))
	file := filepath.Join(dir, "sockline.toml")
	if err := os.WriteFile(file, []byte(config), 0o600); err != nil {
		t.Fatal(err)
	}
	r := running{page: "http://" + page, said: &said{}}
	process := exec.Command(binary, "run", "--config", file)
	process.Stdout, process.Stderr = r.said, r.said
	if err := process.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		_ = process.Process.Kill()
		_ = process.Wait() // it was killed
		if t.Failed() {
			t.Logf("sockline said:\n%s", r.said)
		}
	})
	until(t, "sockline is subscribed", func() bool { return strings.Contains(r.said.String(), `"topics":8`) })
	return r
}

// count is the value of a series of /metrics; -1 if it is not there.
func (r running) count(t *testing.T, series string) float64 {
	t.Helper()
	client := http.Client{Timeout: 5 * time.Second}
	answer, err := client.Get(r.page + "/metrics")
	if err != nil {
		t.Fatal(err)
	}
	defer answer.Body.Close()
	lines := bufio.NewScanner(io.LimitReader(answer.Body, 4<<20))
	for lines.Scan() {
		if value, ok := strings.CutPrefix(lines.Text(), series+" "); ok {
			v, err := strconv.ParseFloat(value, 64)
			if err != nil {
				t.Fatal(err)
			}
			return v
		}
	}
	return -1
}

// senML is a payload of a mast as it should be, with what the arguments change.
func senML(base string, seconds float64, speed, direction string) string {
	return fmt.Sprintf(`[{"bn":%q,"bt":%.3f,"n":"wind_speed","u":"m/s","v":%s},{"n":"wind_direction","u":"deg","v":%s}]`, base, seconds, speed, direction)
}

// TestWhatIsQuarantined: what a mast with a good certificate may send and
// sockline must not believe. Each is counted under its reason, none becomes a
// reading, and the health of the mast shows it.
func TestWhatIsQuarantined(t *testing.T) {
	b := shipped(t, newAuthority(t, "authority"), nil)
	const topic = "airfield/skerrymoor/station/far07/wind"
	mast, cut, err := intruder{address: b.secure, tls: b.client(b.authority, "far07")}.connect()
	if err != nil {
		t.Fatal(err)
	}
	defer cut()
	send := func(payload string, retained bool) {
		t.Helper()
		if p := mast.Publish(topic, 1, retained, payload); !p.WaitTimeout(5*time.Second) || p.Error() != nil {
			t.Fatalf("publish: %v", p.Error())
		}
	}
	now := func() float64 { return float64(time.Now().UnixMilli()) / 1000 }
	// What the broker remembers is no measurement of now.
	send(senML("far07:", now(), "7", "80"), true)
	r := run(t, b)
	rejected := func(reason string) string {
		return fmt.Sprintf(`sockline_rejected_readings_total{reason=%q,station="far07"}`, reason)
	}
	until(t, "the retained reading is counted", func() bool { return r.count(t, rejected("retained")) == 1 })
	cases := []struct {
		name    string
		payload func() string // made when it is sent, since what is late is refused as late
		reason  string
	}{
		{"the base name of another mast", func() string { return senML("airfield/skerrymoor/station/touch07/", now(), "7", "80") }, "inconsistent"},
		{"the name of another mast", func() string { return senML("touch07:", now(), "7", "80") }, "inconsistent"},
		{"marked as synthetic", func() string {
			return strings.Replace(senML("far07:", now(), "7", "80"), "[", `[{"n":"exercise","vb":true},`, 1)
		}, "exercise"},
		{"of the day after tomorrow", func() string { return senML("far07:", now()+2*86400, "7", "80") }, "future"},
		{"of an hour ago", func() string { return senML("far07:", now()-3600, "7", "80") }, "late"},
		{"faster than any wind", func() string { return senML("far07:", now(), "150", "80") }, "range"},
		{"slower than none", func() string { return senML("far07:", now(), "-3", "80") }, "inconsistent"},
		{"no number", func() string { return senML("far07:", now(), `"NaN"`, "80") }, "unreadable"},
		{"beyond a circle", func() string { return senML("far07:", now(), "7", "400") }, "inconsistent"},
		{"half a payload", func() string { return senML("far07:", now(), "7", "80")[:60] }, "unreadable"},
		{"no payload of this world", func() string { return "\xff\x00\xfe" }, "unreadable"},
		{"nested without end", func() string { return strings.Repeat("[", 5000) }, "unreadable"},
	}
	for _, c := range cases {
		before := r.count(t, rejected(c.reason))
		send(c.payload(), false)
		until(t, c.name+" is counted as "+c.reason, func() bool { return r.count(t, rejected(c.reason)) > before })
	}
	if n := r.count(t, `sockline_readings_total{station="far07"}`); n != 0 {
		t.Errorf("%v readings of far07 are believed", n)
	}
	t.Logf("%d of %d payloads that must not be believed are quarantined", len(cases)+1, len(cases)+1)
	// It is shown to everybody who may look.
	tower := subscriber(t, "mqtt://"+b.plain, "tower", "sockline/skerrymoor/station/far07")
	limit := time.After(15 * time.Second)
	for shown := false; !shown; {
		select {
		case m := <-tower.Messages():
			shown = strings.Contains(string(m.Payload), `"problem":"`) && !strings.Contains(string(m.Payload), `"rejected":0,`)
		case <-limit:
			t.Fatal("the health of far07 says nothing of it")
		}
	}
	// The test is worth something only if a good reading is believed.
	send(senML("far07:", now(), "7", "80"), false)
	until(t, "a good reading is believed", func() bool { return r.count(t, `sockline_readings_total{station="far07"}`) == 1 })
}

// TestCertificatesScript makes, tries and revokes certificates with the script
// that is shipped.
func TestCertificatesScript(t *testing.T) {
	if _, err := exec.LookPath("openssl"); err != nil {
		t.Skip("SKIPPED, NOT TESTED: there is no openssl on this machine; install it")
	}
	dir := filepath.Join(t.TempDir(), "made")
	script := func(want string, args ...string) {
		t.Helper()
		out, err := exec.Command("./certificates", append([]string{dir}, args...)...).CombinedOutput()
		if (err == nil) != (want == "") || !strings.Contains(string(out), want) {
			t.Fatalf("certificates %v: %v: %s", args, err, out)
		}
	}
	script("there is no authority", "client", "far07")
	script("", "authority")
	script("is there already", "authority")
	script("", "broker", "localhost", "127.0.0.1")
	script("", "client", "far07")
	script("", "client", "touch07")
	script("is no name for a client", "client", "far07/#")
	script("is no name for a client", "client", "Far07")
	script("is there already", "client", "far07")
	script("", "revoke", "far07")
	for _, key := range []string{"ca.key", "broker.key", "far07.key"} {
		if info, err := os.Stat(filepath.Join(dir, key)); err != nil || info.Mode().Perm() != 0o600 {
			t.Errorf("%s: %v, %v", key, info, err)
		}
	}
	ca := newAuthority(t, "unused")
	b := shippedFrom(t, ca, dir)
	for name, in := range map[string]bool{"touch07": true, "far07": false} {
		as := b.certified(name)
		p := publisherAs(t, as, name)
		if in {
			until(t, name+" is let in", p.Connected)
		} else {
			until(t, name+" is refused", func() bool { return p.State().Problem != nil })
		}
		if p.Connected() != in {
			t.Errorf("%s is let in: %v", name, p.Connected())
		}
	}
}
