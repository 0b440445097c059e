package config

import "slices"

// Reloadable says what keeps next from taking the place of c while the program
// runs: connections, the page and the files of the history stand until it is
// started anew. Everything else may change. The problems name places in next;
// none means that it can be put in force.
func (c *Config) Reloadable(next *Config) Problems {
	src := newSource(string(next.Source))
	var problems Problems
	fixed := func(key string, same bool, value, what string) {
		if same {
			return
		}
		at := src.value(key)
		problems = append(problems, Problem{
			File: next.File, Line: at.line, Column: at.column, Key: key, Value: shown(value), Message: what,
			Mend: "restart the program to change it, or put back what was there; open alerts go on over a restart",
		})
	}
	const broker = "the connection to the broker stands while the program runs"
	a, b := c.Broker, next.Broker
	fixed("broker.url", a.URL == b.URL, b.URL, broker)
	fixed("broker.username", a.Username == b.Username, b.Username, broker)
	fixed("broker.password_file", a.Password == b.Password, "", "the password is another one now, and "+broker)
	fixed("broker.ca_file", a.CAFile == b.CAFile, b.CAFile, broker)
	fixed("broker.cert_file", a.CertFile == b.CertFile, b.CertFile, broker)
	fixed("broker.key_file", a.KeyFile == b.KeyFile, b.KeyFile, broker)
	fixed("broker.client_id", a.ClientID == b.ClientID, b.ClientID, broker)
	fixed("airfield.id", c.Airfield.ID == next.Airfield.ID, next.Airfield.ID, "alerts and topics are named after it while the program runs")
	prefix := c.MQTT.Prefix == next.MQTT.Prefix || c.Airfield.ID != next.Airfield.ID
	fixed("mqtt.prefix", prefix, next.MQTT.Prefix, "receivers listen under the prefix that the program began with")
	fixed("history.directory", c.History.Directory == next.History.Directory, next.History.Directory, "the files of the history are open while the program runs")
	fixed("page.listen", c.Page == next.Page, next.Page.Listen, "the page is served on one address while the program runs")
	const page = "the page is served while the program runs; what stands in its files may change"
	fixed("page.cert_file", c.Page.CertFile == next.Page.CertFile, next.Page.CertFile, page)
	fixed("page.key_file", c.Page.KeyFile == next.Page.KeyFile, next.Page.KeyFile, page)
	fixed("page.users_file", c.Page.UsersFile == next.Page.UsersFile, next.Page.UsersFile, page)
	tell := func(key string, same bool) {
		fixed(key, same, "", "those who are told are known from the start of the program")
	}
	tell("cap", c.CAP == next.CAP)
	tell("webhook", slices.EqualFunc(c.Webhooks, next.Webhooks, Webhook.same))
	problems.sort()
	return problems
}

// ParseRecorded reads a configuration that was in force once, for going
// through what was recorded under it. What is wrong with its broker, history,
// page and receivers, such as a password file that this machine does not have, is passed
// over: nothing is reached by it.
func ParseRecorded(name string, data []byte) (*Config, Problems) {
	cfg, problems := read(name, data, "", false)
	problems = slices.DeleteFunc(problems, func(p Problem) bool {
		return p.under("broker") || p.under("history") || p.under("page") || p.under("webhook") || p.under("cap")
	})
	if len(problems) > 0 {
		return nil, problems
	}
	return cfg, nil
}
