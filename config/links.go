package config

import (
	"crypto/tls"
	"crypto/x509"
	"errors"
	"io/fs"
	"net"
	"net/url"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"
)

// maxSecretFile is the longest file that [broker] may name, in bytes.
const maxSecretFile = 1 << 18

// broker says where readings come from.
func (t *table) broker(password Secret, override bool) Broker {
	b := t.table("broker", true)
	var s Broker
	address, ok := b.text("url", "", `"mqtts://host:8883"`)
	s.URL = address
	if ok {
		s.Embedded, s.TLS, s.Address = b.address(address)
	}
	s.Username, _ = b.text("username", "", "")
	s.ClientID, _ = b.text("client_id", "", "")
	if override {
		b.take("password_file")
		s.Password = password
	} else if _, content, ok := b.file("password_file"); ok {
		s.Password = Secret(strings.TrimRight(string(content), "\r\n"))
		if s.Password == "" {
			b.blame(b.key("password_file"), "", "write the password into it", "the password file is empty")
		}
	}
	// The files are read here as well as by the session, so that a wrong one is
	// named at start and not at the first reconnect in the night.
	var authorities, certificate, key []byte
	s.CAFile, authorities, _ = b.file("ca_file")
	s.CertFile, certificate, _ = b.file("cert_file")
	s.KeyFile, key, _ = b.file("key_file")
	if authorities != nil && !x509.NewCertPool().AppendCertsFromPEM(authorities) {
		b.blame(b.key("ca_file"), "", "name a file of certificates in PEM", "there is no certificate in this file")
	}
	if certificate != nil && key != nil {
		if _, err := tls.X509KeyPair(certificate, key); err != nil {
			b.blame(b.key("cert_file"), "", "name a certificate and its key, both in PEM", "certificate and key do not fit: %v", err)
		}
	}
	b.together(s, override)
	if !b.absent {
		b.done()
	}
	return s
}

// together checks the keys of [broker] against each other: a key without
// effect is a mistake that nobody would notice.
func (t *table) together(s Broker, override bool) {
	has := func(name string) bool { _, ok := t.values[name]; return ok }
	if has("username") && s.Username == "" && !t.blamed(t.key("username")) {
		t.blame(t.key("username"), "", "write the name, or take the line out", "this text is empty")
	}
	if has("client_id") && (s.ClientID == "" || len(s.ClientID) > maxID) && !t.blamed(t.key("client_id")) {
		t.blame(t.key("client_id"), s.ClientID, "shorten it, or take the line out", "a client id has 1 to %d characters", maxID)
	}
	if has("cert_file") != has("key_file") {
		name := "cert_file"
		if has("key_file") {
			name = "key_file"
		}
		t.blame(t.key(name), "", "give both or neither", "cert_file and key_file belong together")
	}
	if s.Address == "" {
		return // without a broker there is no saying what it needs
	}
	for _, name := range []string{"ca_file", "cert_file", "key_file"} {
		if has(name) && !s.TLS {
			t.blame(t.key(name), "", "write mqtts:// in url, or take the line out", "this has no effect without TLS")
		}
	}
	if s.Embedded {
		for _, name := range []string{"username", "password_file", "client_id"} {
			if has(name) {
				t.blame(t.key(name), "", "take the line out", "the embedded broker asks for no credentials, it listens on loopback only")
			}
		}
		return // PasswordVariable may be set for other programs' sake
	}
	if (has("password_file") || override) && !has("username") {
		key, what := "password_file", "a password without a username is not sent"
		if override && !has(key) {
			key, what = "url", PasswordVariable+" is set, and "+what
		}
		t.blame(t.key(key), "", "add username", "%s", what) // MQTT 3.1.1 [MQTT-3.1.2-22]
	}
}

// address takes the url of a broker apart.
func (t *table) address(text string) (embedded, secure bool, address string) {
	const forms = `write "mqtts://host:8883", "mqtt://host:1883" or "embedded://127.0.0.1:1883"`
	u, err := url.Parse(text)
	if err != nil || u.Hostname() == "" {
		t.blame(t.key("url"), redact(text), forms, "this is not the url of a broker")
		return false, false, ""
	}
	port := "1883"
	switch u.Scheme {
	case "mqtt":
	case "embedded":
		embedded = true
	case "mqtts":
		secure, port = true, "8883"
	default:
		t.blame(t.key("url"), redact(text), forms, "%q is not a way to reach a broker", shown(u.Scheme))
		return false, false, ""
	}
	if u.User != nil {
		t.blame(t.key("url"), redact(text), "use username and password_file", "a url with credentials in it ends up in logs")
		return false, false, ""
	}
	if (u.Path != "" && u.Path != "/") || u.RawQuery != "" || u.Fragment != "" {
		t.blame(t.key("url"), text, forms, "there is something behind host and port")
		return false, false, ""
	}
	if u.Port() != "" {
		port = u.Port()
	}
	if n, err := strconv.ParseUint(port, 10, 16); err != nil || n == 0 && !embedded {
		t.blame(t.key("url"), text, forms, "a port is a number from 1 to 65535")
		return false, false, ""
	}
	if embedded && !loopback(u.Hostname()) {
		t.blame(t.key("url"), text, `write "embedded://127.0.0.1:1883", or run a real broker and write mqtts://`,
			"the embedded broker asks for no password, so it listens on loopback only")
		return false, false, ""
	}
	return embedded, secure, net.JoinHostPort(u.Hostname(), port)
}

// redact hides what stands between "//" and "@", for it may be a password.
func redact(text string) string {
	at := strings.LastIndexByte(text, '@')
	if at < 0 {
		return text
	}
	start := strings.Index(text[:at], "//")
	if start < 0 {
		return "..." + text[at:]
	}
	return text[:start+2] + "..." + text[at:]
}

// loopback tells whether a host is this machine and can be nothing else.
func loopback(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || ip != nil && ip.IsLoopback()
}

// file is the resolved path and the content of a file that an optional key
// names.
func (t *table) file(name string) (path string, content []byte, ok bool) {
	if _, given := t.values[name]; !given {
		t.asked = append(t.asked, name)
		return "", nil, false
	}
	path, ok = t.text(name, "", `"`+name+`"`)
	if !ok {
		return "", nil, false
	}
	full, ok := t.secretPath(name, path)
	if !ok {
		return "", nil, false
	}
	info, err := os.Stat(full)
	switch {
	case err == nil && !info.Mode().IsRegular():
		err = errors.New("not a regular file")
	case err == nil && info.Size() > maxSecretFile:
		err = errors.New("longer than 256 KiB")
	case err == nil:
		content, err = os.ReadFile(full)
	}
	if err != nil {
		var reason *fs.PathError
		if errors.As(err, &reason) {
			err = reason.Err
		}
		t.blame(t.key(name), path, "relative paths start at the directory of the configuration", "the file cannot be read: %v", err)
		return "", nil, false
	}
	return full, content, true
}

// resolve is a path of the configuration as the program opens it.
func (r *reader) resolve(path string) string {
	if filepath.IsAbs(path) {
		return filepath.Clean(path)
	}
	return filepath.Join(r.dir, path)
}

// maxPrefix is the most levels of a prefix: three more follow it, and deeper
// than seven no topic should be.
const maxPrefix = 4

// mqtt says where results are published.
func (t *table) mqtt(id string) MQTT {
	m := t.table("mqtt", false)
	prefix, ok := m.text("prefix", "sockline/"+id, `"sockline/skerrymoor"`)
	m.done()
	if !ok || id == "" && m.values["prefix"] == nil {
		return MQTT{}
	}
	levels := strings.Split(prefix, "/")
	message := ""
	switch {
	case strings.ContainsAny(prefix, "+# \t") || strings.HasPrefix(prefix, "$"):
		message = "a prefix has no wildcards, no blanks and no $ at its beginning"
	case strings.HasPrefix(prefix+"/", "/") || strings.Contains(prefix+"/", "//"):
		message = "a prefix has no empty levels, and no slash at its beginning or end"
	case len(levels) > maxPrefix || len(prefix) > 2*maxID:
		message = "a prefix has at most 4 levels and 64 bytes"
	case levels[0] == "sockline-exercise":
		message = "this prefix is kept for exercises, so that nobody takes one for the other"
	}
	if message != "" {
		m.blame(m.key("prefix"), prefix, `write something like "sockline/`+id+`"`, "%s", message)
		return MQTT{}
	}
	return MQTT{Prefix: prefix}
}

// history says what is kept on disk.
func (t *table) history() History {
	h := t.table("history", false)
	var s History
	directory, ok := h.text("directory", "./sockline-data", `"./sockline-data"`)
	if ok {
		s.Directory = h.resolve(directory)
		if info, err := os.Stat(s.Directory); err == nil && !info.IsDir() {
			h.blame(h.key("directory"), directory, "name a directory; it is made when it is not there", "this is a file")
		}
	}
	s.Keep, ok = h.duration("keep", bounds{"2 days", "3660 days"}, "400 days")
	if ok && s.Keep%(24*time.Hour) != 0 {
		h.blame(h.key("keep"), s.Keep.String(), `write it in days, such as "400 days"`, "readings are kept in whole days")
	}
	h.done()
	return s
}
