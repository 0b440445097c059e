package main

import (
	"net"

	"sockline/config"
	"sockline/sensors/feed"
)

// brokerOf is how a client reaches the broker of a configuration. The built-in
// broker is reached like any other: it listens while the daemon runs.
func brokerOf(cfg *config.Config) feed.Broker {
	b := cfg.Broker
	url := b.URL
	if b.Embedded {
		url = "mqtt://" + b.Address
	}
	return feed.Broker{
		URL: url, Username: b.Username, Password: b.Password.Reveal(),
		CAFile: b.CAFile, CertFile: b.CertFile, KeyFile: b.KeyFile,
	}
}

// onLoopback reports whether host:port is surely on this machine: a loopback
// address, or the name that RFC 6761 section 6.3 reserves for it.
func onLoopback(address string) bool {
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return false
	}
	ip := net.ParseIP(host)
	return host == "localhost" || (ip != nil && ip.IsLoopback())
}
