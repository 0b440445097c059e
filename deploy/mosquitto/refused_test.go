package mosquitto_test

import (
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"net"
	"net/url"
	"slices"
	"strings"
	"testing"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"
)

// intruder is a client that does as it likes. nil TLS: in clear.
type intruder struct {
	address        string
	tls            *tls.Config
	user, password string
	will           string // topic; empty for none
}

// connect dials; cut ends the connection without a goodbye.
func (i intruder) connect() (c mqtt.Client, cut func(), err error) {
	var conn net.Conn
	o := mqtt.NewClientOptions().AddBroker("tcp://" + i.address).SetClientID(fmt.Sprintf("intruder-%p", &conn)).
		SetAutoReconnect(false).SetConnectRetry(false).SetConnectTimeout(5 * time.Second).SetUsername(i.user).SetPassword(i.password)
	if i.will != "" {
		o.SetBinaryWill(i.will, []byte("will"), 1, true)
	}
	o.SetCustomOpenConnectionFn(func(*url.URL, mqtt.ClientOptions) (net.Conn, error) {
		d := &net.Dialer{Timeout: 5 * time.Second}
		if i.tls == nil {
			plain, err := d.Dial("tcp", i.address)
			conn = plain
			return plain, err
		}
		secure, err := tls.DialWithDialer(d, "tcp", i.address, i.tls)
		if err != nil {
			return nil, err // a nil *tls.Conn is no nil net.Conn
		}
		conn = secure
		return secure, nil
	})
	c = mqtt.NewClient(o)
	t := c.Connect()
	if !t.WaitTimeout(10 * time.Second) {
		err = errors.New("no answer")
	} else {
		err = t.Error()
	}
	return c, func() {
		if conn != nil {
			conn.Close()
		}
	}, err
}

// TestWhoIsLetIn tries every way in that must be shut, and then those that
// must be open, so that the test cannot pass because nothing works.
func TestWhoIsLetIn(t *testing.T) {
	ours, other := newAuthority(t, "authority"), newAuthority(t, "authority")
	b := shipped(t, ours, nil)
	past := func(c *x509.Certificate) {
		c.NotBefore, c.NotAfter = time.Now().Add(-48*time.Hour), time.Now().Add(-24*time.Hour)
	}
	ours.issue("expired", "far07", past)
	ours.issue("early", "far07", func(c *x509.Certificate) {
		c.NotBefore = time.Now().Add(24 * time.Hour)
		c.NotAfter = time.Now().Add(48 * time.Hour)
	})
	ours.issue("server-only", "far07", func(c *x509.Certificate) { c.ExtKeyUsage = []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth} })
	ours.issue("nameless", "", nil)
	other.issue("far07", "far07", nil)
	other.issue("sockline", "sockline", nil)
	selfMade := newAuthority(t, "far07") // its own authority, by its own name
	selfMade.issue("far07", "far07", nil)
	plain := func(user, password string) intruder {
		return intruder{address: b.plain, user: user, password: password}
	}
	secure := func(c *tls.Config) intruder { return intruder{address: b.secure, tls: c} }
	old := ours.client(ours, "far07")
	old.MinVersion, old.MaxVersion = tls.VersionTLS10, tls.VersionTLS11
	cases := []struct {
		name string
		by   intruder
		in   bool
	}{
		{"no name", plain("", ""), false},
		{"a name without a password", plain("far07", ""), false},
		{"a wrong password", plain("far07", "of-touch07"), false},
		{"an unknown name", plain("far08", "of-far08"), false},
		{"the name with a capital", plain("Far07", "of-far07"), false},
		{"the name with a wildcard", plain("#", "of-far07"), false},
		{"no certificate", secure(ours.client(ours, "")), false},
		{"a password in place of a certificate", intruder{address: b.secure, tls: ours.client(ours, ""), user: "far07", password: "of-far07"}, false},
		{"an expired certificate", secure(ours.client(ours, "expired")), false},
		{"a certificate of tomorrow", secure(ours.client(ours, "early")), false},
		{"a certificate for servers", secure(ours.client(ours, "server-only")), false},
		{"a certificate without a name", secure(ours.client(ours, "nameless")), false},
		{"a certificate of another authority of the same name", secure(other.client(ours, "far07")), false},
		{"sockline's name by another authority", secure(other.client(ours, "sockline")), false},
		{"a certificate that it made itself", secure(selfMade.client(ours, "far07")), false},
		{"in clear where it is encrypted", intruder{address: b.secure, user: "far07", password: "of-far07"}, false},
		{"encrypted as of long ago", secure(old), false},
		{"encrypted where it is in clear", intruder{address: b.plain, tls: ours.client(ours, "far07")}, false},
		{"far07 by password", plain("far07", "of-far07"), true},
		{"far07 by certificate", secure(ours.client(ours, "far07")), true},
	}
	refused := 0
	for _, c := range cases {
		client, cut, err := c.by.connect()
		in := err == nil && client.IsConnected()
		if in != c.in {
			t.Errorf("%s: let in is %v: %v", c.name, in, err)
		}
		if !in {
			refused++
		}
		cut()
	}
	t.Logf("%d of %d ways in that must be shut are shut", refused, len(cases)-2)
	if n := strings.Count(b.said.String(), "not authorised") + strings.Count(b.said.String(), "OpenSSL Error"); n == 0 {
		t.Error("the broker's log says nothing of who was refused")
	}
}

// TestRevoked: a certificate that was revoked does not open any more.
func TestRevoked(t *testing.T) {
	ca := newAuthority(t, "authority")
	stolen := ca.issue("stolen", "touch07", nil)
	ca.revoke(stolen)
	b := shipped(t, ca, nil)
	if _, cut, err := (intruder{address: b.secure, tls: ca.client(ca, "stolen")}).connect(); err == nil {
		cut()
		t.Error("a revoked certificate is let in")
	}
	if _, cut, err := (intruder{address: b.secure, tls: ca.client(ca, "touch07")}).connect(); err != nil {
		t.Errorf("the new certificate of the same mast is refused: %v", err)
	} else {
		cut()
	}
}

// TestBrokersThatAreNotOurs: sockline and the masts tell nothing to a broker
// whose certificate does not hold.
func TestBrokersThatAreNotOurs(t *testing.T) {
	for name, spoil := range map[string]func(c *x509.Certificate){
		"expired": func(c *x509.Certificate) {
			c.NotBefore, c.NotAfter = time.Now().Add(-48*time.Hour), time.Now().Add(-time.Hour)
		},
		"another host": func(c *x509.Certificate) { c.DNSNames = []string{"broker.example"} },
		"for clients":  func(c *x509.Certificate) { c.ExtKeyUsage = []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth} },
		"stranger":     nil,
	} {
		t.Run(name, func(t *testing.T) {
			ca := newAuthority(t, "authority")
			b := shipped(t, ca, spoil)
			as := b.certified("sockline")
			if name == "stranger" {
				as.CAFile = newAuthority(t, "authority").file("ca.crt")
			}
			p := publisherAs(t, as, "sockline")
			until(t, "the certificate is complained of", func() bool { return p.State().Problem != nil })
			if p.Connected() || !strings.Contains(p.State().Problem.Error(), "certificate") {
				t.Errorf("connected %v: %v", p.Connected(), p.State().Problem)
			}
		})
	}
}

// TestWhatIsDropped sends, as clients with good certificates, what each must
// not, and looks at what arrives at a reader of everything, live and retained.
func TestWhatIsDropped(t *testing.T) {
	ca := newAuthority(t, "authority")
	b := shipped(t, ca, nil)
	ca.issue("stranger", "stranger", nil)
	ca.issue("plus", "+", nil)
	ca.issue("hash", "#", nil)
	ca.issue("slash", "far07/wind/../../touch07", nil)
	witness := subscriber(t, "mqtt://"+b.plain, "witness", "#")
	until(t, "the witness is subscribed", func() bool { return witness.State().Subscribed })

	const own = "airfield/skerrymoor/station/%s/wind"
	wind := func(id string) string { return fmt.Sprintf(own, id) }
	cases := []struct {
		file, topic string
		user        string // that it claims to be, besides its certificate
		retained    bool
		size        int
		passes      bool
	}{
		{file: "far07", topic: wind("touch07")},
		{file: "far07", topic: wind("touch07"), retained: true},
		{file: "far07", topic: wind("touch07"), user: "touch07"},
		{file: "far07", topic: wind("far07x")},
		{file: "far07", topic: "airfield/skerrymoor/station/far0/wind"},
		{file: "far07", topic: "airfield/skerrymoor/station"},
		{file: "far07", topic: "airfield/skerrymoor/station//far07"},
		{file: "far07", topic: "airfield/elsewhere/station/far07/wind"},
		{file: "far07", topic: "Airfield/skerrymoor/station/far07/wind"},
		{file: "far07", topic: "/airfield/skerrymoor/station/far07/wind"},
		{file: "far07", topic: "sockline/skerrymoor/alert"},
		{file: "far07", topic: "sockline/skerrymoor/alert", user: "sockline"},
		{file: "far07", topic: "sockline/skerrymoor/status", retained: true},
		{file: "far07", topic: "sockline/skerrymoor/path/07/landing", retained: true},
		{file: "far07", topic: "sockline/skerrymoor/station/far07", retained: true},
		{file: "far07", topic: "sockline/skerrymoor/heartbeat"},
		{file: "far07", topic: "sockline/skerrymoor/cap"},
		{file: "far07", topic: "sockline-exercise/skerrymoor/alert"},
		{file: "far07", topic: "somewhere/else", retained: true},
		{file: "far07", topic: wind("far07"), size: 70000}, // more than a message may have
		{file: "plus", topic: wind("touch07")},
		{file: "hash", topic: wind("touch07")},
		{file: "slash", topic: wind("touch07")},
		{file: "stranger", topic: wind("far07")},
		{file: "stranger", topic: "sockline/skerrymoor/alert"},
		{file: "sockline", topic: wind("far07")},
		{file: "sockline", topic: wind("far07"), retained: true},
		{file: "sockline", topic: "sockline/elsewhere/status", retained: true},
		{file: "tower", topic: "sockline/skerrymoor/alert"},
		{file: "tower", topic: "sockline/skerrymoor/status", retained: true},
		{file: "tower", topic: wind("far07")},
		{file: "training", topic: "sockline-exercise/skerrymoor/alert"},
		{file: "training", topic: "sockline/skerrymoor/alert"},
		{file: "far07", topic: wind("far07"), passes: true},
		{file: "sockline", topic: "sockline/skerrymoor/alert", passes: true},
		{file: "sockline", topic: "sockline/skerrymoor/cap", passes: true},
	}
	for i, c := range cases {
		client, cut, err := intruder{address: b.secure, tls: ca.client(ca, c.file), user: c.user}.connect()
		if err != nil {
			t.Fatalf("case %d, %s: %v", i, c.file, err)
		}
		payload := fmt.Appendf(nil, "%d ", i)
		payload = append(payload, make([]byte, c.size)...)
		// The broker may end the connection over it, or acknowledge what it drops.
		client.Publish(c.topic, 1, c.retained, payload).WaitTimeout(5 * time.Second)
		cut()
	}
	// A last will is a message, too.
	wills := []string{"sockline/skerrymoor/status", "sockline/skerrymoor/alert", wind("touch07")}
	for _, topic := range wills {
		if _, cut, err := (intruder{address: b.secure, tls: ca.client(ca, "far07"), will: topic}).connect(); err == nil {
			cut()
		}
	}
	_, cut, err := intruder{address: b.secure, tls: ca.client(ca, "far07"), will: "airfield/skerrymoor/station/far07/farewell"}.connect()
	if err != nil {
		t.Fatal(err)
	}
	cut()
	// What has not come before this will, which may pass, never does.
	var arrived []string
	limit := time.After(15 * time.Second)
	for done := false; !done; {
		select {
		case m := <-witness.Messages():
			arrived = append(arrived, m.Topic+" "+strings.TrimSpace(strings.Trim(string(m.Payload[:min(len(m.Payload), 8)]), "\x00")))
			done = strings.HasSuffix(m.Topic, "/farewell")
		case <-limit:
			t.Fatalf("the last will of far07 never came; arrived: %q", arrived)
		}
	}
	dropped := 0
	for i, c := range cases {
		got := slices.Contains(arrived, fmt.Sprintf("%s %d", c.topic, i))
		if got != c.passes {
			t.Errorf("%s as %q writes %s: passes %v", c.file, c.user, c.topic, got)
		}
		if !got {
			dropped++
		}
	}
	for _, topic := range wills {
		if slices.Contains(arrived, topic+" will") {
			t.Errorf("the last will of far07 reaches %s", topic)
		} else {
			dropped++
		}
	}
	t.Logf("%d of %d messages that must be dropped are dropped", dropped, len(cases)-3+len(wills))
	// Nothing of it is retained for who comes later, but the will that may be.
	late := subscriber(t, "mqtt://"+b.plain, "witness", "#")
	for done := false; !done; {
		select {
		case m := <-late.Messages():
			done = strings.HasSuffix(m.Topic, "/farewell")
			if !done {
				t.Errorf("%s is retained", m.Topic)
			}
		case <-limit:
			t.Fatal("the retained will of far07 never came")
		}
	}
}
