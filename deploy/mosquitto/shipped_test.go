package mosquitto_test

import (
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"math/big"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"sockline/sensors/feed"
)

// authority vouches for the certificates of a test.
type authority struct {
	tb     testing.TB
	dir    string
	cert   *x509.Certificate
	key    *ecdsa.PrivateKey
	serial int64
	lapsed []*big.Int // serial numbers of what was revoked
}

func newAuthority(tb testing.TB, name string) *authority {
	tb.Helper()
	a := &authority{tb: tb, dir: tb.TempDir(), serial: time.Now().UnixNano()}
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		tb.Fatal(err)
	}
	c := a.template(name)
	c.IsCA, c.BasicConstraintsValid, c.ExtKeyUsage = true, true, nil
	c.KeyUsage = x509.KeyUsageCertSign | x509.KeyUsageCRLSign
	c.SubjectKeyId = []byte(name)
	der, err := x509.CreateCertificate(rand.Reader, c, c, &key.PublicKey, key)
	if err != nil {
		tb.Fatal(err)
	}
	if a.cert, err = x509.ParseCertificate(der); err != nil {
		tb.Fatal(err)
	}
	a.key = key
	a.write("ca.crt", "CERTIFICATE", der)
	a.revoke()
	return a
}

func (a *authority) template(name string) *x509.Certificate {
	a.serial++
	return &x509.Certificate{
		SerialNumber: big.NewInt(a.serial), Subject: pkix.Name{CommonName: name},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		KeyUsage: x509.KeyUsageDigitalSignature, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth},
	}
}

// issue writes file.crt and file.key for a name; edit may spoil it.
func (a *authority) issue(file, name string, edit func(c *x509.Certificate)) *x509.Certificate {
	a.tb.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		a.tb.Fatal(err)
	}
	c := a.template(name)
	if edit != nil {
		edit(c)
	}
	der, err := x509.CreateCertificate(rand.Reader, c, a.cert, &key.PublicKey, a.key)
	if err != nil {
		a.tb.Fatal(err)
	}
	private, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		a.tb.Fatal(err)
	}
	a.write(file+".crt", "CERTIFICATE", der)
	a.write(file+".key", "PRIVATE KEY", private)
	return c
}

// revoke writes the list of what no longer holds.
func (a *authority) revoke(more ...*x509.Certificate) {
	a.tb.Helper()
	for _, c := range more {
		a.lapsed = append(a.lapsed, c.SerialNumber)
	}
	list := &x509.RevocationList{Number: big.NewInt(time.Now().UnixNano()), ThisUpdate: time.Now().Add(-time.Minute), NextUpdate: time.Now().Add(time.Hour)}
	for _, n := range a.lapsed {
		list.RevokedCertificateEntries = append(list.RevokedCertificateEntries, x509.RevocationListEntry{SerialNumber: n, RevocationTime: time.Now().Add(-time.Minute)})
	}
	der, err := x509.CreateRevocationList(rand.Reader, list, a.cert, a.key)
	if err != nil {
		a.tb.Fatal(err)
	}
	a.write("ca.crl", "X509 CRL", der)
}

func (a *authority) write(name, kind string, der []byte) {
	a.tb.Helper()
	if err := os.WriteFile(filepath.Join(a.dir, name), pem.EncodeToMemory(&pem.Block{Type: kind, Bytes: der}), 0o600); err != nil {
		a.tb.Fatal(err)
	}
}

func (a *authority) file(name string) string { return filepath.Join(a.dir, name) }

// client is how somebody with a certificate of this authority dials a broker
// that another may have vouched for.
func (a *authority) client(broker *authority, file string) *tls.Config {
	a.tb.Helper()
	c := &tls.Config{RootCAs: x509.NewCertPool(), ServerName: "localhost"}
	c.RootCAs.AddCert(broker.cert)
	if file != "" {
		pair, err := tls.LoadX509KeyPair(a.file(file+".crt"), a.file(file+".key"))
		if err != nil {
			a.tb.Fatal(err)
		}
		c.Certificates = []tls.Certificate{pair}
	}
	return c
}

// shippedBroker is a broker that runs by the configuration in this directory.
type shippedBroker struct {
	*authority
	plain, secure string // host:port of the two listeners
	said          *said
}

// said collects what a process says.
type said struct {
	mu sync.Mutex
	b  strings.Builder
}

func (s *said) Write(p []byte) (int, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.b.Write(p)
}

func (s *said) String() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.b.String()
}

// certified is the broker as a client with a certificate sees it.
func (b *shippedBroker) certified(file string) feed.Broker {
	return feed.Broker{
		URL: "mqtts://localhost:" + port(b.secure), CAFile: b.file("ca.crt"), CertFile: b.file(file + ".crt"), KeyFile: b.file(file + ".key"),
	}
}

func port(address string) string {
	_, p, _ := net.SplitHostPort(address)
	return p
}

func freePort(tb testing.TB) string {
	tb.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		tb.Fatal(err)
	}
	defer l.Close()
	return port(l.Addr().String())
}

// shipped runs a broker from sockline.conf itself, with only its ports and the
// places of its files changed. Everybody of users has a certificate and a
// password. spoil may change the broker's own certificate.
func shipped(t *testing.T, ca *authority, spoil func(c *x509.Certificate)) *shippedBroker {
	t.Helper()
	for _, user := range users {
		ca.issue(user, user, nil)
	}
	ca.issue("broker", "broker", func(c *x509.Certificate) {
		c.ExtKeyUsage = []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth}
		c.DNSNames = []string{"localhost"}
		if spoil != nil {
			spoil(c)
		}
	})
	return shippedFrom(t, ca, ca.dir)
}

// shippedFrom is shipped with the certificates that lie in a directory.
func shippedFrom(t *testing.T, ca *authority, dir string) *shippedBroker {
	t.Helper()
	passwd := passwords(t)
	acl := amended(t, passwd, "witness", "user witness\ntopic read #\n")
	ca.dir = dir
	text, err := os.ReadFile("sockline.conf")
	if err != nil {
		t.Fatal(err)
	}
	b := &shippedBroker{authority: ca, plain: "127.0.0.1:" + freePort(t), secure: "127.0.0.1:" + freePort(t), said: &said{}}
	changed := strings.NewReplacer("\nlistener 1883 ", "\nlistener "+port(b.plain)+" ", "\nlistener 8883\n", "\nlistener "+port(b.secure)+" 127.0.0.1\n",
		"/etc/mosquitto/sockline.passwd", passwd, "/etc/mosquitto/sockline.acl", acl, "/etc/mosquitto/sockline/", ca.dir+"/").Replace(string(text))
	if os.Geteuid() == 0 {
		changed = "user root\n" + changed // it could not read the test's files as another user
	}
	file := filepath.Join(t.TempDir(), "sockline.conf")
	if err := os.WriteFile(file, []byte(changed), 0o600); err != nil {
		t.Fatal(err)
	}
	binary, err := exec.LookPath("mosquitto")
	if err != nil {
		binary = "/usr/sbin/mosquitto"
	}
	ctx, cancel := context.WithCancel(context.WithoutCancel(t.Context()))
	process := exec.CommandContext(ctx, binary, "-c", file)
	process.Stdout, process.Stderr = b.said, b.said
	if err := process.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		cancel()
		_ = process.Wait() // it was killed
		if t.Failed() {
			t.Logf("the broker said:\n%s", b.said)
		}
		if strings.Contains(b.said.String(), "deprecated") {
			t.Errorf("the broker complains:\n%s", b.said)
		}
	})
	for _, address := range []string{b.plain, b.secure} {
		until(t, "the broker listens on "+address, func() bool {
			c, err := net.Dial("tcp", address)
			if err == nil {
				c.Close()
			}
			return err == nil
		})
	}
	return b
}
