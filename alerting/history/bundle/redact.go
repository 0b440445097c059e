package bundle

import (
	"fmt"
	"regexp"
	"strings"

	"sockline/alerting/history"
)

// withheld stands where words are left out.
const withheld = "(withheld)"

// redaction replaces words of people. What it replaces loses its salt, so
// that the commitment in the chain cannot be opened any more.
type redaction struct {
	texts   bool // withhold everything that people wrote
	names   bool
	aliases map[string]string // by lower-case name, as they came up
	known   []knownName
}

type knownName struct {
	name    string
	pattern *regexp.Regexp
}

func newRedaction(names []string, o Options) *redaction {
	r := &redaction{texts: o.RedactTexts, names: o.RedactNames, aliases: map[string]string{}}
	for _, name := range names {
		// Not within a longer word: Go's \b knows only ASCII.
		p := regexp.MustCompile(`(?i)(^|[^\pL\pN])` + regexp.QuoteMeta(name) + `($|[^\pL\pN])`)
		r.known = append(r.known, knownName{name: name, pattern: p})
	}
	return r
}

// alias is what a name is called instead, the same throughout the archive.
func (r *redaction) alias(name string) string {
	key := strings.ToLower(name)
	if r.aliases[key] == "" {
		r.aliases[key] = fmt.Sprintf("person %d", len(r.aliases)+1)
	}
	return r.aliases[key]
}

// apply redacts the shown links and says how many texts that people wrote are
// kept as they are.
func (r *redaction) apply(links []history.Link) (kept int) {
	for i := range links {
		for k := range links[i].Words {
			w := &links[i].Words[k]
			if w.Text == "" {
				continue
			}
			was := w.Text
			switch w.Field {
			case "who":
				if r.names {
					w.Text = r.alias(was)
				}
			case "from", "aircraft": // an address or a registration is somebody's
				if r.names {
					w.Text = withheld
				}
			default:
				w.Text = r.prose(was)
			}
			if w.Text != was {
				w.Salt, w.Withheld = "", true
			} else if w.Field != "who" {
				kept++
			}
		}
	}
	return kept
}

// prose is a text with the known names replaced, or nothing of it.
func (r *redaction) prose(text string) string {
	if r.texts {
		return withheld
	}
	if !r.names {
		return text
	}
	for _, k := range r.known {
		// One at a time: two names may share the blank between them.
		for range strings.Count(strings.ToLower(text), strings.ToLower(k.name)) {
			at := k.pattern.FindStringSubmatchIndex(text)
			if at == nil {
				break
			}
			text = text[:at[3]] + r.alias(k.name) + text[at[4]:]
		}
	}
	return text
}
