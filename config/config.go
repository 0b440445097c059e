// Package config takes the text of a configuration file and gives validated
// values of the other packages, or every problem of the text at once, each
// with its line, column and mend. It knows defaults and bounds, and refuses
// whatever it does not know. Next: cmd/sockline, which hands the values to
// the packages that use them.
package config

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"time"
	"unicode/utf8"

	"github.com/BurntSushi/toml"

	"sockline/alerting/airfield"
	"sockline/alerting/vertical"
	"sockline/sensors"
)

// PasswordVariable is the environment variable that, when set, takes the
// place of [broker] password_file.
const PasswordVariable = "SOCKLINE_BROKER_PASSWORD"

// maxSize is the longest configuration, in bytes. A field with 200 masts
// takes about 50 kB.
const maxSize = 1 << 20

// Config is a validated configuration. Speeds are m/s, lengths metres, angles
// degrees; paths are resolved against the directory of the file.
type Config struct {
	File     string // as given to Load or Parse
	Source   []byte // the text with LF line ends and no byte order mark
	Hash     string // SHA-256 of Source, hexadecimal
	Airfield *airfield.Airfield
	Stations []sensors.Station // in the order of Airfield.Masts
	Alerts   Alerts
	Analysis Analysis
	Broker   Broker
	MQTT     MQTT
	History  History
	Page     Page
	Webhooks []Webhook
	CAP      CAP
}

// Alerts says when an alert opens and closes.
type Alerts struct {
	ApproachSpeed        float64 // of the slowest aircraft, m/s
	FastestApproachSpeed float64 // of the fastest aircraft, m/s
	Noticeable           float64 // change of headwind of level 1, m/s
	Large                float64 // of level 2, m/s
	Margin               float64 // loss of headwind of level 3, m/s
	MarginFBar           float64 // F-factor averaged over 1 km of level 3
	Confidence           float64 // probability at which a level opens
	Hysteresis           float64 // how far a change must fall below a level, m/s
	Hold                 time.Duration
	WindShift            float64        // turn of the wind from which on it is told, degrees
	VerticalShear        vertical.Class // from which on a vertical shear is told; none: none is
	CrosswindLimit       float64        // at a runway end, over two minutes, m/s; 0: none
	TailwindLimit        float64        // the same

	StallMargin    float64 // 1 - 1/1.3 of ApproachSpeed, m/s
	MarginDerived  bool    // Margin comes from StallMargin, not from the file
	MarginRaisedUp bool    // StallMargin is under 15 kt: a loss below Margin already uses it up
}

// Analysis says how readings become steps.
type Analysis struct {
	Window   time.Duration // of the station wind
	Lateness time.Duration // how long a step waits for its readings
	Reach    float64       // how far a mast speaks for the wind, m
	// RemoveSiting takes out of the analysis what the places of the masts do to
	// their winds, where enough is learnt.
	RemoveSiting bool
}

// Broker says where the readings come from.
type Broker struct {
	URL      string // as written
	Embedded bool   // the program's own broker, on loopback
	TLS      bool
	Address  string // host:port
	Username string
	Password Secret
	CAFile   string // absent: the system's authorities
	CertFile string
	KeyFile  string
	ClientID string // absent: made from the program and host names
}

// MQTT says where results are published.
type MQTT struct {
	Prefix string // of every topic, without a slash at its end
}

// History says what is kept on disk.
type History struct {
	Directory string
	Keep      time.Duration // of readings, whole days
}

// Secret is text that no printing verb and no encoder gives away.
type Secret string

// Reveal is the text itself.
func (s Secret) Reveal() string { return string(s) }

// String hides the text.
func (s Secret) String() string {
	if s == "" {
		return ""
	}
	return "(hidden)"
}

// GoString hides the text from %#v.
func (s Secret) GoString() string { return fmt.Sprintf("%q", s.String()) }

// MarshalText hides the text from encoders.
func (s Secret) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// Load reads the configuration at path. Its error is a Problems. It also
// looks at PasswordVariable and at the files that the configuration names.
func Load(path string) (*Config, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, unreadable(path, err)
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxSize+1))
	if err != nil {
		return nil, unreadable(path, err)
	}
	password, override := os.LookupEnv(PasswordVariable)
	cfg, problems := parse(path, data, Secret(password), override && password != "")
	if len(problems) > 0 {
		return nil, problems
	}
	return cfg, nil
}

// Parse reads a configuration from data. The name stands in the problems, and
// its directory is where relative paths start. The Config is nil if there are
// problems.
func Parse(name string, data []byte) (*Config, Problems) {
	return parse(name, data, "", false)
}

func unreadable(path string, err error) Problems {
	var reason *fs.PathError
	if errors.As(err, &reason) {
		err = reason.Err
	}
	return Problems{{File: path, Message: "the configuration cannot be read: " + err.Error(), Mend: "check the path given with --config"}}
}

// parse is Parse with a password that takes the place of the password file.
func parse(name string, data []byte, password Secret, override bool) (*Config, Problems) {
	cfg, problems := read(name, data, password, override)
	if len(problems) > 0 {
		return nil, problems
	}
	return cfg, nil
}

// read is parse with what could be read in spite of the problems.
func read(name string, data []byte, password Secret, override bool) (*Config, Problems) {
	text, problem := plainText(name, data)
	if problem != nil {
		return nil, Problems{*problem}
	}
	values := make(map[string]any)
	if _, err := toml.Decode(text, &values); err != nil {
		return nil, Problems{syntaxProblem(name, text, err)}
	}
	r := &reader{file: name, dir: filepath.Dir(name), src: newSource(text)}
	root := &table{reader: r, values: values}
	sum := sha256.Sum256([]byte(text))
	cfg := &Config{File: name, Source: []byte(text), Hash: hex.EncodeToString(sum[:])}

	// The order matters where a section needs another: topics must lie outside
	// the prefix, which needs the id; intervals must fit the window.
	spec := root.airfield()
	runways := root.runways(&spec)
	cfg.Alerts = root.alerts()
	cfg.Analysis = root.analysis()
	cfg.Broker = root.broker(password, override)
	cfg.MQTT = root.mqtt(spec.ID)
	cfg.Stations = root.stations(cfg.Analysis, cfg.MQTT)
	cfg.History = root.history()
	cfg.Page = root.page()
	cfg.CAP = root.cap()
	cfg.Webhooks = root.webhooks(cfg.CAP)
	root.done()
	cfg.Airfield = r.geometry(spec, runways, cfg.Stations)
	r.problems.sort()
	return cfg, r.problems
}

// plainText is the text of data without a byte order mark and with LF line
// ends, which editors differ in and which mean nothing.
func plainText(name string, data []byte) (string, *Problem) {
	problem := func(at place, message, mend string) (string, *Problem) {
		return "", &Problem{File: name, Line: at.line, Column: at.column, Message: message, Mend: mend}
	}
	start := place{1, 1}
	switch {
	case len(data) > maxSize:
		return problem(start, "the file is longer than 1 MiB", "this is hardly a configuration; check the path")
	case bytes.HasPrefix(data, []byte("\xff\xfe")) || bytes.HasPrefix(data, []byte("\xfe\xff")):
		return problem(start, "the file is written in UTF-16", "save it as UTF-8")
	}
	text := strings.ReplaceAll(strings.TrimPrefix(string(data), "\uFEFF"), "\r\n", "\n")
	if !utf8.ValidString(text) {
		valid := 0
		for valid < len(text) {
			r, size := utf8.DecodeRuneInString(text[valid:])
			if r == utf8.RuneError && size == 1 {
				break
			}
			valid += size
		}
		return problem(lines(text).at(valid), "this is not UTF-8", "save the file as UTF-8, or retype this character")
	}
	return text, nil
}

// syntaxProblem is what the TOML library says, with a place. It stops at its
// first error, so there is only one.
func syntaxProblem(name, text string, err error) Problem {
	at := place{1, 1}
	message := err.Error()
	var pe toml.ParseError
	if errors.As(err, &pe) {
		message = pe.Message
		if message == "" {
			message = strings.TrimPrefix(pe.Error(), "toml: ")
		}
		at = lines(text).at(pe.Position.Start)
	}
	return Problem{
		File: name, Line: at.line, Column: at.column, Message: "this is not TOML: " + shown(message),
		Mend: "correct it; problems further down are shown after that",
	}
}
