package bundle

import (
	"encoding/json"
	"fmt"
	"io"
	"slices"
	"strings"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
)

// content is everything about one event, but its readings.
type content struct {
	options    Options
	event      history.Event
	occurrence string
	runway     string
	from, to   sensors.Instant // of the readings: from <= T < to
	shown      map[uint64]bool // records whose payload is in it
	links      []history.Link
	excerpt    history.Excerpt
	redact     *redaction // nil: nothing is
}

// gather looks up the event and the stretch of the journal that concerns it:
// from the configuration that was in force to the end of the day of the last
// word about it.
func gather(s *history.Store, id string, o Options) (*content, error) {
	c := &content{options: o, shown: map[uint64]bool{}}
	var err error
	if c.event, err = s.Event(id); err != nil {
		return nil, err
	}
	var object struct{ Occurrence, Runway string }
	if err := json.Unmarshal(c.event.Object, &object); err != nil {
		return nil, fmt.Errorf("event %q: its alert object: %w", id, err)
	}
	c.occurrence, c.runway = object.Occurrence, object.Runway
	c.from, c.to = c.event.Opened.Add(-Around), c.event.Closed.Add(Around)
	if c.event.Closed == 0 {
		now := o.Now
		if now == 0 {
			if now, _, err = s.LastStep(); err != nil {
				return nil, fmt.Errorf("event %q: %w", id, err)
			}
		}
		c.to = max(now, c.event.Updated) + sensors.Second
	}
	if err := c.choose(s); err != nil {
		return nil, err
	}
	seqs := sorted(c.shown)
	if len(seqs) == 0 {
		return nil, fmt.Errorf("event %q has no record in the journal", id)
	}
	c.excerpt, err = s.Excerpt(seqs[0], seqs[len(seqs)-1], func(r history.Record) error {
		c.links = append(c.links, r.Link(c.shown[r.Seq]))
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("take the proof of event %q out of the journal: %w; \"sockline history verify\" names what is damaged", id, err)
	}
	return c, nil
}

// choose finds the records that belong to the event.
func (c *content) choose(s *history.Store) error {
	var names []string
	latest := map[string]uint64{} // of what was in force at the first reading
	err := s.Journal(1, func(r history.Record) error {
		if who := whoOf(r); who != "" && !slices.Contains(names, who) {
			names = append(names, who)
		}
		within := r.At >= c.from && r.At < c.to
		switch r.Kind {
		case history.KindIssue:
			is, err := r.Issue()
			if err == nil && is.Alert.ID == c.event.ID {
				c.shown[r.Seq] = true
			}
		case history.KindConfiguration, history.KindSoftware, history.KindTable, history.KindRunwayInUse:
			if r.At <= c.from {
				latest[r.Kind.String()+tableOf(r)] = r.Seq
			} else if within {
				c.shown[r.Seq] = true
			}
		case history.KindStart, history.KindStop, history.KindGap, history.KindDamage, history.KindPilotReport:
			if within {
				c.shown[r.Seq] = true
			}
		}
		return nil
	})
	if err != nil {
		return fmt.Errorf("read the journal: %w; \"sockline history verify\" names what is damaged", err)
	}
	for _, seq := range latest {
		c.shown[seq] = true
	}
	for r, err := range s.About(c.event.ID, c.occurrence) {
		if err != nil {
			return fmt.Errorf("read what people did: %w", err)
		}
		c.shown[r.Seq] = true
	}
	if c.options.RedactNames || c.options.RedactTexts {
		c.redact = newRedaction(names, c.options)
	}
	return nil
}

// whoOf is the name in a record of what somebody did.
func whoOf(r history.Record) string {
	if r.Kind < history.KindNote || r.Kind > history.KindSheet {
		return ""
	}
	var p struct{ Who string }
	if json.Unmarshal(r.Payload, &p) != nil {
		return ""
	}
	return p.Who
}

// tableOf is the name of a learnt table, so that the newest of each is kept.
func tableOf(r history.Record) string {
	var t struct{ Table string }
	if r.Kind == history.KindTable && json.Unmarshal(r.Payload, &t) == nil {
		return " " + t.Table
	}
	return ""
}

func sorted(set map[uint64]bool) []uint64 {
	seqs := make([]uint64, 0, len(set))
	for seq := range set {
		seqs = append(seqs, seq)
	}
	slices.Sort(seqs)
	return seqs
}

// said is a record of what somebody did, or of the program, in plain JSON.
type said struct {
	Record  uint64          `json:"record"` // in journal/chain.jsonl
	At      string          `json:"at"`
	Kind    string          `json:"kind"`
	Content json.RawMessage `json:"content"`
	Whole   bool            `json:"whole"` // nothing is withheld
}

// recordParts names the part that shows the records of a kind.
func recordParts(k history.Kind) string {
	switch k {
	case history.KindSoftware, history.KindStart, history.KindStop:
		return partSoftware
	case history.KindGap, history.KindDamage:
		return partNotices
	case history.KindIssue, history.KindConfiguration, history.KindTable:
		return ""
	}
	return partPeople
}

// saidBy gives the shown records of a part.
func saidBy(links []history.Link, name string) ([]said, error) {
	var out []said
	for _, l := range links {
		if !l.Shown() || recordParts(l.Kind) != name {
			continue
		}
		payload, whole, err := l.Payload()
		if err != nil {
			return nil, err
		}
		if !json.Valid(payload) {
			if payload, err = json.Marshal(string(payload)); err != nil {
				return nil, err
			}
		}
		out = append(out, said{Record: l.Seq, At: l.At.String(), Kind: l.Word, Content: payload, Whole: whole})
	}
	return out, nil
}

// files are the shown records that are a part each.
func filesOf(links []history.Link) (names []string, content [][]byte) {
	for _, l := range links {
		ending := map[history.Kind]string{history.KindConfiguration: "configuration-%d.toml", history.KindTable: "table-%d.json"}[l.Kind]
		if ending == "" || !l.Shown() {
			continue
		}
		payload, _, err := l.Payload()
		if err != nil {
			continue // neither of the two kinds has words of people
		}
		names, content = append(names, fmt.Sprintf(ending, l.Seq)), append(content, payload)
	}
	return names, content
}

// records writes the parts that come out of the journal.
func (c *content) records(b *builder, sum *Summary) {
	for _, name := range []string{partPeople, partSoftware, partNotices} {
		all, err := saidBy(c.links, name)
		if err != nil && b.err == nil {
			b.err = err
		}
		if name == partPeople {
			sum.People = len(all)
		}
		b.lines(name, len(all), func(i int) any { return all[i] })
	}
	names, files := filesOf(c.links)
	for i, name := range names {
		b.part(name, func(w io.Writer) error { _, err := w.Write(files[i]); return err })
	}
}

// chainHeads is journal/heads.json.
type chainHeads struct {
	First  uint64         `json:"first_record"`
	Before history.Digest `json:"sha256_before"`
	Days   []history.Head `json:"days"` // that ended in it: compare them with what was published
	End    history.Head   `json:"end"`
	Notice string         `json:"notice"`
}

func (c *content) heads() chainHeads {
	return chainHeads{First: c.links[0].Seq, Before: c.excerpt.Before, Days: c.excerpt.Heads, End: c.excerpt.End, Notice: alerting.Notice}
}

// about is event.json.
type about struct {
	Event      string          `json:"event"`
	Occurrence string          `json:"occurrence"`
	Opened     string          `json:"opened"`
	Closed     string          `json:"closed,omitempty"`
	From       string          `json:"readings_from"`
	To         string          `json:"readings_to"`
	Readings   uint64          `json:"readings"`
	Issues     int             `json:"issues"`
	Newest     json.RawMessage `json:"newest_issue"`
	Damage     []string        `json:"damage"` // of the readings: what is missing because of it
	Notice     string          `json:"notice"`
}

func (c *content) about(sum *Summary) about {
	a := about{
		Event: c.event.ID, Occurrence: c.occurrence, Opened: c.event.Opened.String(), From: sum.From, To: sum.To,
		Readings: sum.Readings, Issues: sum.Issues, Newest: c.event.Object, Damage: append([]string{}, sum.Damage...), Notice: alerting.Notice,
	}
	if c.event.Closed != 0 {
		a.Closed = c.event.Closed.String()
	}
	return a
}

// readme is README.txt.
func (c *content) readme() string {
	var b strings.Builder
	fmt.Fprintf(&b, "Evidence of the event %s\n\n", c.event.ID)
	b.WriteString(`event.json             what it is, and how far this archive reaches
issues.jsonl           every issue of the alert, as it was told
people.jsonl           acknowledgements, notes, pilot reports and what else people did about it
configuration-N.toml   each configuration that was in force, with the sensor book; N is its record
table-N.json           what had been learnt about masts and clocks and was in force
software.jsonl         versions, starts and stops of the program
gaps-and-damage.jsonl  what was not kept, or found damaged
readings.csv           every reading, in time or not, from 10 min before to 10 min after
sensors.json           what came from each mast in that time
journal/chain.jsonl    the stretch of the journal: each record follows from the one before it
journal/heads.json     where the chain begins, ends, and stood at the end of each day
manifest.json          SHA-256 of each part, and the public key
manifest.sig           Ed25519 signature of manifest.json, in hexadecimal

Check it with: sockline history verify --bundle FILE. Compare the public key and the daily heads with
those that the airfield published at the time. The journal is proved by its chain; the readings, which
are not in the chain, rest on the signature.

`)
	b.WriteString(alerting.Notice + "\n")
	return b.String()
}
