package page

import (
	"net/http"
)

// Basis is what the program says of itself.
type Basis struct {
	Version, Go, Revision string
	Instance, Started     string
	Configuration         string // the text in force, without secrets
	ConfigurationHash     string // SHA-256 of the file
	ConfigurationSince    string // the first step that it judged; empty: none yet
	Method                []string
}

// basis answers with what everything here rests on.
func (p *Page) basis(w http.ResponseWriter, _ *http.Request) {
	if p.opts.Basis == nil {
		p.problem(w, http.StatusServiceUnavailable, "not-there", "This is not available here.", "This program does not say what it runs by.")
		return
	}
	b := p.opts.Basis()
	p.json(w, http.StatusOK, "application/json", struct {
		Version            string   `json:"version"`
		Go                 string   `json:"go"`
		Revision           string   `json:"revision"`
		Instance           string   `json:"instance"`
		Started            string   `json:"started"`
		Configuration      string   `json:"configuration"`
		ConfigurationHash  string   `json:"configuration_hash"`
		ConfigurationSince string   `json:"configuration_since"`
		Method             []string `json:"method"`
		marks
	}{
		b.Version, b.Go, b.Revision, b.Instance, b.Started, b.Configuration, b.ConfigurationHash, b.ConfigurationSince,
		listed(b.Method), p.marks(),
	})
}
