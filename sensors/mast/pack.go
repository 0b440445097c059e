package mast

import (
	"encoding/json"
	"fmt"
	"math"
	"strconv"
	"strings"

	"sockline/sensors"
)

// maxPack is how many readings go into one message. Catching up after an
// outage sends a message a twentieth of a second, so that no receiver takes it
// for a flood; with a hundred readings each, a day of one a second is through
// in three quarters of a minute.
const maxPack = 100

// alike is how many of the first records can go into one message: an exercise
// marks the whole.
func alike(records []Record) int {
	for i, r := range records {
		if r.Exercise != records[0].Exercise {
			return i
		}
	}
	return len(records)
}

// pack writes readings as SenML (RFC 8428) in JSON, each with its own time.
func pack(station string, records []Record) []byte {
	b := make([]byte, 0, 160*len(records))
	b = append(b, '[')
	for i, r := range records {
		if i > 0 {
			b = append(b, ',')
		}
		b = append(b, '{')
		if i == 0 {
			b = append(b, `"bn":`...)
			b = strconv.AppendQuote(b, station+"/")
			b = append(b, ',')
		}
		b = append(b, `"bt":`...)
		b = appendSeconds(b, r.Time)
		b = append(b, `,"n":"wind_speed","u":"m/s","v":`...)
		b = appendRounded(b, r.Speed, 1e4)
		b = append(b, `},{"n":"wind_direction","u":"deg","v":`...)
		b = appendRounded(b, r.From, 1e3)
		if r.HasGust {
			b = append(b, `},{"n":"wind_gust","u":"m/s","v":`...)
			b = appendRounded(b, r.Gust, 1e4)
		}
		b = append(b, '}')
	}
	if len(records) > 0 && records[0].Exercise {
		b = append(b, `,{"n":"exercise","vb":true}`...)
	}
	return append(b, ']')
}

// appendRounded writes a value to 1/scale: far below what any instrument
// resolves, and free of the tails of converted units.
func appendRounded(b []byte, v, scale float64) []byte {
	return strconv.AppendFloat(b, math.Round(v*scale)/scale, 'f', -1, 64)
}

// appendSeconds writes an instant as decimal seconds since 1970.
func appendSeconds(b []byte, t sensors.Instant) []byte {
	b = strconv.AppendInt(b, int64(t)/1000, 10)
	if ms := int64(t) % 1000; ms != 0 {
		b = fmt.Appendf(b, ".%03d", ms)
	}
	return b
}

// StatusTopic is where an agent tells whether it lives: beside its topic.
func StatusTopic(topic string) string {
	if cut := strings.LastIndexByte(topic, '/'); cut > 0 {
		return topic[:cut] + "/status"
	}
	return topic + "/status"
}

// status is what an agent tells about itself. A birth and the will of the same
// session carry the same since, so that a will that comes late is known for
// what it is.
type status struct {
	Online  bool   `json:"online"`
	Since   string `json:"since"` // start of the session
	Station string `json:"station"`
	At      string `json:"at,omitempty"`
	Source  string `json:"source,omitempty"`
	State   string `json:"state,omitempty"` // reading, silent, or why there is nothing to read
	Lines   uint64 `json:"lines,omitempty"`
	Refused uint64 `json:"refused,omitempty"`
	Queued  int    `json:"queued"`
	Dropped uint64 `json:"dropped"`
}

func (s status) payload() []byte {
	b, err := json.Marshal(s)
	if err != nil {
		return nil // it holds nothing that could fail
	}
	return b
}

// Will is the message that the broker is to send, retained, to StatusTopic
// when the session that began at since breaks off.
func Will(station string, since sensors.Instant) []byte {
	return status{Since: since.String(), Station: station}.payload()
}
