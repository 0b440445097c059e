package config

import (
	"bytes"
	"crypto/x509"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"time"

	"sockline/alerting/publish/cap"
	"sockline/alerting/publish/webhook"
)

// Webhook is an HTTP receiver of alerts.
type Webhook struct {
	Name        string // unique; in logs, metrics and a file name
	URL         string
	Format      webhook.Format
	Secret      Secret // of the seal; empty for none
	CAFile      string
	Authorities []byte // the certificates of CAFile, PEM; nil for the system's
	Heartbeat   bool   // an event a minute, too
	Exercise    bool   // exercises, too
	Timeout     time.Duration
}

// same tells two receivers that are told the same way.
func (w Webhook) same(o Webhook) bool {
	return bytes.Equal(w.Authorities, o.Authorities) && w.Name == o.Name && w.URL == o.URL && w.Format == o.Format && w.Secret == o.Secret &&
		w.CAFile == o.CAFile && w.Heartbeat == o.Heartbeat && w.Exercise == o.Exercise && w.Timeout == o.Timeout
}

// CAP says where standard alert messages go besides webhooks.
type CAP struct {
	Sender string // who they are from; empty: there are none
	Spool  string // directory of files; empty for none
	Topic  string // level below the prefix; empty for none
}

const (
	// maxWebhooks bounds the receivers: each has a goroutine, a file and
	// connections.
	maxWebhooks = 16
	// leastSecret is the shortest secret, in bytes: a seal under a shorter one
	// can be guessed.
	leastSecret = 16
)

// cap says where standard alert messages go.
func (t *table) cap() CAP {
	c := t.table("cap", false)
	if c.absent {
		return CAP{}
	}
	var s CAP
	var ok bool
	if s.Sender, ok = c.text("sender", "", ""); ok && s.Sender != "" {
		if err := cap.CheckSender(s.Sender); err != nil {
			c.blame(c.key("sender"), s.Sender, `write a name such as "sockline@skerrymoor.example"`, "a sender has letters only, without blanks, commas, < and &")
		}
	}
	if spool, ok := c.text("spool", "", ""); ok && spool != "" {
		s.Spool = c.resolve(spool)
		if info, err := os.Stat(s.Spool); err == nil && !info.IsDir() {
			c.blame(c.key("spool"), spool, "name a directory; it is made when it is not there", "this is a file")
		}
	}
	s.Topic, _ = c.text("topic", "", "")
	plain := strings.Trim(s.Topic, "abcdefghijklmnopqrstuvwxyz0123456789-") == ""
	switch taken := []string{"alert", "heartbeat", "path", "station", "status"}; {
	case !plain || len(s.Topic) > maxID:
		c.blame(c.key("topic"), s.Topic, `write "cap"`, "this is one level below the prefix: a-z, 0-9 and '-', at most %d characters", maxID)
	case slices.Contains(taken, s.Topic):
		c.blame(c.key("topic"), s.Topic, `write "cap"`, "this topic carries something else")
	}
	if s.Sender == "" && (s.Spool != "" || s.Topic != "") && !c.blamed(c.key("sender")) {
		c.missing("sender", `"sockline@skerrymoor.example"`)
	}
	c.done()
	return s
}

// webhooks are the HTTP receivers.
func (t *table) webhooks(c CAP) []Webhook {
	var all []Webhook
	names := map[string]int{}
	for i, w := range t.tables("webhook") {
		h := w.webhook(c)
		if first, ok := names[h.Name]; ok && h.Name != "" {
			key := w.key("name")
			if _, given := w.values["name"]; !given {
				key = w.key("url")
			}
			at := t.src.value("webhook." + strconv.Itoa(first) + ".url")
			w.blame(key, h.Name, "give each a name of its own", "two receivers have one name: the other is in line %d", at.line)
		}
		names[h.Name] = i
		all = append(all, h)
	}
	if len(all) > maxWebhooks {
		t.add(t.src.key("webhook."+strconv.Itoa(maxWebhooks)), "webhook", "", "let one receiver pass on to others", "there are %d receivers; at most %d", len(all), maxWebhooks)
	}
	return all
}

// webhook is one receiver.
func (t *table) webhook(c CAP) Webhook {
	var s Webhook
	host, secure := "", false
	text, ok := t.text("url", "", `"https://tower.example/alerts"`)
	if ok {
		s.URL = text
		host, secure = t.receiver(text)
	}
	if _, given := t.values["name"]; given {
		s.Name, _ = t.id("name", `"tower"`)
	} else {
		t.asked = append(t.asked, "name")
		s.Name = idOf(host)
	}
	format, _ := t.oneOf("format", string(webhook.CloudEvents), string(webhook.CloudEvents), string(webhook.CAP))
	s.Format = webhook.Format(format)
	if s.Format == webhook.CAP && c.Sender == "" {
		t.blame(t.key("format"), format, "add [cap] with a sender", "standard alert messages need to say who they are from")
	}
	if _, content, ok := t.file("secret_file"); ok {
		s.Secret = Secret(strings.TrimRight(string(content), "\r\n"))
		if len(s.Secret) < leastSecret {
			t.blame(t.key("secret_file"), "", "write one with: openssl rand -hex 32", "the secret has fewer than %d characters", leastSecret)
		}
	}
	s.CAFile, s.Authorities, _ = t.file("ca_file")
	switch {
	case s.Authorities == nil:
	case !x509.NewCertPool().AppendCertsFromPEM(s.Authorities):
		t.blame(t.key("ca_file"), "", "name a file of certificates in PEM", "there is no certificate in this file")
	case host != "" && !secure:
		t.blame(t.key("ca_file"), "", "write https:// in url, or take the line out", "this has no effect without TLS")
	}
	s.Heartbeat = t.truth("heartbeat")
	s.Exercise = t.truth("exercise")
	s.Timeout, _ = t.duration("timeout", bounds{"1 s", "60 s"}, "10 s")
	t.done()
	return s
}

// receiver takes the url of a webhook apart.
func (t *table) receiver(text string) (host string, secure bool) {
	const form = `write "https://host/path"`
	u, err := url.Parse(text)
	switch {
	case err != nil || u.Hostname() == "" || u.Scheme != "https" && u.Scheme != "http":
		t.blame(t.key("url"), redact(text), form, "this is not the url of a web server")
	case u.User != nil:
		t.blame(t.key("url"), redact(text), "use secret_file: what is sent is sealed with it", "a url with credentials in it ends up in logs")
	case u.Fragment != "":
		t.blame(t.key("url"), text, form, "a fragment is never sent")
	case u.Scheme == "http" && !loopback(u.Hostname()):
		t.blame(t.key("url"), text, form, "alerts leave this machine over TLS only")
	default:
		return u.Host, u.Scheme == "https"
	}
	return "", false
}

// idOf makes a name of a host: "tower-example-8443".
func idOf(host string) string {
	name := strings.Map(func(r rune) rune {
		if strings.ContainsRune("abcdefghijklmnopqrstuvwxyz0123456789", r) {
			return r
		}
		return '-'
	}, strings.ToLower(host))
	if len(name) > maxID {
		name = name[:maxID]
	}
	return strings.Trim(name, "-")
}

// Queue is the file of a receiver's queue in the directory of the history.
func (c *Config) Queue(w Webhook) string {
	return filepath.Join(c.History.Directory, "webhooks", w.Name+".queue")
}
