package config

import (
	"crypto/tls"
	"net"
	"strconv"
)

// Page says where the page is served, and to whom.
type Page struct {
	Listen    string // host:port; beyond this machine only with the three files
	CertFile  string // absent: unencrypted
	KeyFile   string
	UsersFile string // absent: nobody logs in, and nothing can be changed
}

// page says where the page is served.
func (t *table) page() Page {
	p := t.table("page", false)
	listen, ok := p.text("listen", "127.0.0.1:7625", `"127.0.0.1:7625"`)
	var s Page
	// Certificate and key are looked at here, so that a wrong one is named at
	// the start; the daemon reads them again when they are renewed.
	var certificate, key []byte
	s.CertFile, certificate, _ = p.file("cert_file")
	s.KeyFile, key, _ = p.file("key_file")
	if certificate != nil && key != nil {
		if _, err := tls.X509KeyPair(certificate, key); err != nil {
			p.blame(p.key("cert_file"), "", "name a certificate and its key, both in PEM", "certificate and key do not fit: %v", err)
		}
	}
	has := func(name string) bool { _, given := p.values[name]; return given }
	encrypted, users := has("cert_file"), has("users_file")
	if encrypted != has("key_file") {
		name := "cert_file"
		if !encrypted {
			name = "key_file"
		}
		p.blame(p.key(name), "", "give both or neither", "cert_file and key_file belong together")
	}
	s.UsersFile = p.users()
	p.done()
	if !ok {
		return s
	}
	s.Listen = listen
	host, port, err := net.SplitHostPort(listen)
	if err == nil {
		_, err = strconv.ParseUint(port, 10, 16)
	}
	switch {
	case err != nil:
		p.blame(p.key("listen"), listen, `write "127.0.0.1:7625"`, "this is not an address and a port")
	case !loopback(host) && !encrypted:
		p.blame(p.key("listen"), listen, `name cert_file and key_file, or write "127.0.0.1:7625"`,
			"without TLS the page is served on loopback only: passwords would be sent for all to read")
	case !loopback(host) && !users:
		p.blame(p.key("listen"), listen, `name a users_file, or write "127.0.0.1:7625"`,
			"without users the page is served on loopback only: nobody could be told apart")
	}
	return s
}

// users is where the users stand. The file need not be there yet: the command
// that writes it reads this configuration.
func (t *table) users() string {
	if _, given := t.values["users_file"]; !given {
		t.asked = append(t.asked, "users_file")
		return ""
	}
	path, ok := t.text("users_file", "", `"users"`)
	if !ok {
		return ""
	}
	if path == "" {
		t.blame(t.key("users_file"), "", "name a file, or take the line out", "this text is empty")
		return ""
	}
	return t.resolve(path)
}
