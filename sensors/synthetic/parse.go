package synthetic

import (
	"errors"
	"fmt"
	"strconv"
	"strings"
	"time"

	"sockline/sensors"
)

// Geometry is what a scene file needs to know of the airfield it names.
type Geometry interface {
	// Along is the place beforeThreshold metres before the threshold of the
	// runway end (negative: beyond it) and offset metres to the right of the
	// direction of flight, in metres east and north of the reference point.
	Along(runway string, beforeThreshold, offset float64) (x, y float64, err error)
	// Station is the place of a mast, in the same metres.
	Station(id string) (x, y float64, ok bool)
}

// ParseError is one fault of a scene file.
type ParseError struct {
	File string
	Line int
	Text string // what is wrong and what was expected
}

// Error is "file:line: text".
func (e *ParseError) Error() string { return fmt.Sprintf("%s:%d: %s", e.File, e.Line, e.Text) }

// maxSceneBytes bounds a scene file; the largest of ours is a fiftieth of it.
const maxSceneBytes = 256 << 10

// maxSceneLength bounds event time: a scene is a matter of minutes to a day.
const maxSceneLength = 24 * time.Hour

// Parse reads a scene. file is its name for errors; its base without the
// extension becomes the scene's name. The error joins a *ParseError for each
// faulty line.
//
// A scene is plain text, one statement a line, # starts a comment. Words are
// separated by blanks; a quantity is a number and a unit ("24 kt", "900 m",
// "5 min", "070 deg"). Options may stand in any order, each once. Times count
// from the start of the scene, directions are true, speeds hold at 10 m.
//
//	title      free text
//	airfield   ID
//	start      2026-07-01T14:00:00Z
//	length     20 min
//	seed       7
//	wind       240 deg 12 kt                     where it comes from
//	roughness  0.03 m
//	turbulence A | B | C | none                  classes of IEC 61400-1
//	eddies     0.8 m/s length 1000 m time 300 s
//	aloft      from 250 deg 24 kt above 25 m [starts 3 min grows 4 min]
//	veer       40 deg starts 3 min takes 10 min  negative: backs
//	rise       from 160 deg 20 kt starts 4 min grows 2 min
//	           [holds 5 min fades 2 min] [crosses PLACE toward 340 deg 8 m/s]
//	front      passes PLACE at 6 min toward 070 deg 9 m/s strength 20 kt width 150 m
//	           [from 230 deg] [curve 6 km] [fades 10 min]
//	outflow    at PLACE strength 24 kt radius 900 m starts 5 min grows 5 min holds 3 min fades 5 min
//	           [model NAME] [profile NAME] [height 75 m] [stretch 2 axis 030 deg]
//	           [moves toward 070 deg 5 m/s] [spreads 1 m/s]
//	masts      [noise 0.1 m/s] [drop 1 %] [delay 50 ms to 200 ms]
//	mast ID    dies | sticks | turned 15 deg | reads 80 % | spikes 20 kt on 1 % |
//	           clock ahead 2 s | clock behind 2 s | drops 20 % | delays to 3 s
//	           [at T | from T] [until T]
//	broker     lost from 5 min to 7 min
//	expect     alert KIND on PATH [level LEVEL] [WHEN]
//	expect     no alert [KIND] [on PATH] [level LEVEL] [WHEN]
//	expect     quiet [on PATH] [WHEN]
//	expect     closed KIND on PATH [because REASON] [WHEN]
//	expect     unseen KIND on PATH [WHEN]
//	expect     not-observed | below-limits | raised on PATH [WHEN]
//	expect     unobserved 4500 m to 5000 m on PATH [WHEN]
//	expect     missing ID on PATH [WHEN]
//
// (A statement stands on one line; the breaks above are for the page.)
// PLACE is "2 km before 07", "300 m beyond 07", either with "offset 100 m" to
// the right of the flight, or "mast ID", or "1200 m east -300 m north" of the
// reference point. PATH is "landing 07" or "take-off 25". WHEN is "by T", "at
// T", "from T" or "between T and T".
//
// The strength of an outflow is its greatest speed; headwind changes by up to
// twice that from side to side.
func Parse(file string, source []byte, geometry Geometry) (*Scene, error) {
	base := file[strings.LastIndexAny(file, `/\`)+1:]
	p := &parser{
		file:     file,
		geometry: geometry,
		seen:     map[string]int{},
		scene: &Scene{
			Name: strings.TrimSuffix(base, ".scene"),
			Seed: 1, Masts: DefaultInstrument(),
		},
	}
	if len(source) > maxSceneBytes {
		return nil, &ParseError{File: file, Line: 1, Text: fmt.Sprintf("the file has %d bytes; a scene has at most %d", len(source), maxSceneBytes)}
	}
	for i, text := range strings.Split(string(source), "\n") {
		text, _, _ = strings.Cut(text, "#")
		words := strings.Fields(text)
		if len(words) == 0 {
			continue
		}
		l := &line{number: i + 1, words: words[1:], geometry: geometry}
		p.statement(words[0], l)
		if l.err == nil && len(l.words) > 0 {
			l.fail("%q is not expected here", l.words[0])
		}
		if l.err != nil {
			p.errs = append(p.errs, &ParseError{File: file, Line: l.number, Text: words[0] + ": " + l.err.Error()})
		}
	}
	for _, needed := range []string{"airfield", "start", "length", "wind"} {
		if _, ok := p.seen[needed]; !ok {
			p.errs = append(p.errs, &ParseError{File: file, Line: 1, Text: fmt.Sprintf("the statement %q is missing", needed)})
		}
	}
	if err := errors.Join(p.errs...); err != nil {
		return nil, err
	}
	return p.scene, nil
}

// parser is the state between lines.
type parser struct {
	file     string
	geometry Geometry
	seen     map[string]int // statements that may stand once, and their line
	scene    *Scene
	errs     []error
}

// statement reads one line into the scene.
func (p *parser) statement(keyword string, l *line) {
	switch keyword {
	case "rise":
		l.rise(p.scene)
	case "front":
		l.front(p.scene)
	case "veer":
		l.veer(p.scene)
	case "outflow":
		l.outflow(p.scene)
	case "mast":
		l.mast(p.scene)
	case "broker":
		l.literal("lost")
		l.literal("from")
		from := l.seconds()
		l.literal("to")
		p.scene.Outages = append(p.scene.Outages, l.span(from, l.seconds()))
	case "expect":
		l.expect(p.scene)
	default:
		if first, again := p.seen[keyword]; again {
			l.fail("it already stands in line %d", first)
			return
		}
		p.seen[keyword] = l.number
		p.single(keyword, l)
	}
}

// single reads a statement that may stand once.
func (p *parser) single(keyword string, l *line) {
	s := p.scene
	switch keyword {
	case "title":
		s.Title = strings.Join(l.words, " ")
		l.words = nil
		if s.Title == "" {
			l.fail("a text is expected")
		}
	case "airfield":
		s.Airfield = l.word("the id of an airfield")
	case "start":
		s.Start = l.instant()
	case "length":
		s.Length = l.duration()
		if s.Length < time.Second || s.Length%time.Second != 0 || s.Length > maxSceneLength {
			l.fail("%v is not a whole number of seconds from 1 s to 24 h", s.Length)
		}
	case "seed":
		text := l.word("a whole number")
		seed, err := strconv.ParseUint(text, 10, 64)
		if err != nil {
			l.fail("%q is not a whole number from 0 to 2^64-1", text)
		}
		s.Seed = seed
	case "wind":
		s.From = l.direction()
		s.Speed = l.speed("the wind", 0, 75)
	case "roughness":
		s.Roughness = l.length("the roughness", 0.0001, 3)
	case "turbulence":
		s.Turbulence = l.turbulenceClass()
	case "eddies":
		l.eddies(s)
	case "aloft":
		l.aloft(s)
	case "masts":
		l.masts(s)
	default:
		l.fail("there is no such statement; expected title, airfield, start, length, seed, wind, roughness, " +
			"turbulence, eddies, aloft, veer, rise, front, outflow, masts, mast, broker or expect")
	}
}

// instant reads an RFC 3339 time on a whole second.
func (l *line) instant() sensors.Instant {
	text := l.word("a time")
	t, err := time.Parse(time.RFC3339, text)
	if err != nil || t.Nanosecond() != 0 || t.Year() < 1980 || t.Year() > 2200 {
		l.fail("%q is not a time on a whole second such as 2026-07-01T14:00:00Z", text)
		return 0
	}
	return sensors.At(t)
}
