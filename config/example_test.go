package config

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"math/big"
	"os"
	"path/filepath"
	"reflect"
	"regexp"
	"strings"
	"testing"
	"time"
)

// deployed copies the example into a directory with the files that it names.
func deployed(t *testing.T, text string) string {
	t.Helper()
	dir := t.TempDir()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	template := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "invented"},
		NotBefore: time.Unix(0, 0), NotAfter: time.Unix(1<<32, 0),
	}
	cert, err := x509.CreateCertificate(rand.Reader, template, template, &key.PublicKey, key)
	if err != nil {
		t.Fatal(err)
	}
	private, err := x509.MarshalPKCS8PrivateKey(key)
	if err != nil {
		t.Fatal(err)
	}
	certPEM := pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: cert})
	for name, content := range map[string][]byte{
		"sockline.toml": []byte(text), "broker-password": []byte("invented\n"), "webhook-secret": []byte("invented-and-long-enough\n"), "broker-authority.pem": certPEM, "sockline.pem": certPEM, "page.crt": certPEM,
		"sockline-key.pem": pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: private}),
		"page.key":         pem.EncodeToMemory(&pem.Block{Type: "PRIVATE KEY", Bytes: private}),
	} {
		if err := os.WriteFile(filepath.Join(dir, name), content, 0o600); err != nil {
			t.Fatal(err)
		}
	}
	return filepath.Join(dir, "sockline.toml")
}

// A commented-out key: #, the key without a blank, =; or a commented-out table.
var offKey = regexp.MustCompile(`(?m)^(\s*)#([a-z_]+\s*=|\[\[?[a-z]+\])`)

func TestDeployedExample(t *testing.T) {
	text := string(mustRead(t, "../deploy/sockline.example.toml"))
	plain := mustLoad(t, deployed(t, text))
	if !plain.Broker.TLS || plain.Broker.Password.Reveal() != "invented" || len(plain.Stations) != 5 {
		t.Errorf("%+v", plain.Broker)
	}
	if n := len(offKey.FindAllString(text, -1)); n < 25 {
		t.Fatalf("only %d keys are commented out", n)
	}
	// With every key in force it loads too, and what is shown as a default is
	// the default.
	full := mustLoad(t, deployed(t, offKey.ReplaceAllString(text, "$1$2")))
	if full.Broker.CertFile == "" || full.Broker.KeyFile == "" || full.Broker.CAFile == "" || full.Broker.ClientID == "" {
		t.Errorf("%+v", full.Broker)
	}
	if len(full.Webhooks) != 1 || full.Webhooks[0].Secret.Reveal() != "invented-and-long-enough" || full.CAP.Spool == "" || len(plain.Webhooks) != 0 {
		t.Errorf("%+v, %+v", full.Webhooks, full.CAP)
	}
	if full.Analysis != plain.Analysis || full.MQTT != plain.MQTT || full.Page.Listen != plain.Page.Listen || full.History.Keep != plain.History.Keep {
		t.Errorf("%+v\n%+v", full, plain)
	}
	if p := full.Page; p.CertFile == "" || p.KeyFile == "" || !filepath.IsAbs(p.UsersFile) || plain.Page.UsersFile != "" {
		t.Errorf("%+v", p)
	}
	a, b := plain.Alerts, full.Alerts
	if a.Noticeable != b.Noticeable || a.Large != b.Large || a.MarginFBar != b.MarginFBar || a.Confidence != b.Confidence ||
		a.Hysteresis != b.Hysteresis || a.Hold != b.Hold || !reflect.DeepEqual(plain.Stations[0], full.Stations[0]) ||
		plain.Airfield.Runways[0] != full.Airfield.Runways[0] {
		t.Errorf("%+v\n%+v", a, b)
	}
}

// Every key that the program asks for is in the example, and the other way
// round, for the example loads.
func TestExampleExplainsEveryKey(t *testing.T) {
	text := offKey.ReplaceAllString(string(mustRead(t, "../deploy/sockline.example.toml")), "$1$2")
	for _, c := range []struct{ inside, table string }{
		{"[airfield]", "airfield"}, {"[broker]", "broker"}, {"[mqtt]", "mqtt"}, {"[alerts]", "alerts"}, {"[analysis]", "analysis"},
		{"[history]", "history"}, {"[page]", "page"}, {"[cap]", "cap"}, {"[[webhook]]", "webhook.0"}, {"[[runway]]", "runway.0"}, {"[[runway.end]]", "runway.0.end.0"},
		{"[[station]]", "station.0"}, {"[station.fields]", "station.1.fields"},
	} {
		path := deployed(t, strings.Replace(text, c.inside+"\n", c.inside+"\nzzzzzzzzzzzzzzzz = 1\n", 1))
		_, err := Load(path)
		if err == nil {
			t.Fatalf("%s: an unknown key is accepted", c.table)
		}
		_, list, ok := strings.Cut(err.Error(), "known keys: ")
		if !ok {
			t.Errorf("%s: %v", c.table, err)
			continue
		}
		for _, key := range strings.Split(list, ", ") {
			if !regexp.MustCompile(`(?m)^\s*` + key + `\s*=|^\s*\[+(runway\.)?(station\.)?` + key + `\]`).MatchString(text) {
				t.Errorf("%s: %s is not in the example", c.table, key)
			}
		}
	}
}
