package page

import (
	"strings"
	"time"

	"sockline/alerting"
)

// refresh is how often the page loads itself anew where no module runs, in
// seconds.
const refresh = 2

// frontWords is the page Now in words only: what is shown before the stream has
// brought a step, and where a browser runs no modules.
type frontWords struct {
	Refresh   int
	Lasts     int  // whole seconds after which the browser blanks the words by itself
	Known     bool // false: everything is no information
	Why       string
	At        string
	Condition string // the word
	Mark      string // the shape beside it
	Meaning   string
	Remarks   []string
	Alerts    []frontAlert
	Paths     []frontPath
	Ends      []wordsEnd
	Stations  []Station
}

type wordsEnd struct {
	Runway   string
	Observed bool
	Sentence string
}

type frontAlert struct {
	Class    string
	Word     string // fall or rise
	Level    int
	Name     string
	Observed bool
	Sentence string
}

type frontPath struct {
	Class      string
	Word       string
	Name       string
	Sentence   string
	Unobserved []string
}

// frontWords puts the view into words. A view that is too old keeps the names of
// what there is and loses every value.
func (p *Page) frontWords() frontWords {
	last := p.opts.View()
	v, why := p.current()
	f := frontWords{Refresh: refresh, Lasts: int(MaxAge / time.Second), Known: v != nil, Why: why}
	if v == nil {
		f.Condition, f.Mark = "No information", "none"
		f.Meaning = "Nothing here says what the wind does. Read every path as not observed."
		f.blank(last)
		return f
	}
	// The browser counts on from here: words that no step replaces blank
	// themselves when this view gets too old.
	f.Lasts = int((MaxAge - max(0, p.opts.Now().Sub(v.Made))) / time.Second)
	f.At = v.At.Time().Format(utcSeconds)
	f.Condition, f.Mark, f.Meaning = conditionWords(v.Condition)
	f.Remarks, f.Stations = v.Remarks, v.Stations
	for _, e := range v.Ends {
		f.Ends = append(f.Ends, wordsEnd{e.Runway, e.Observed, e.Sentence})
	}
	for _, a := range v.Alerts {
		f.Alerts = append(f.Alerts, alertWords(a))
	}
	for _, path := range v.Paths {
		f.Paths = append(f.Paths, pathWords(path))
	}
	return f
}

// noInformation stands where a value would stand.
const noInformation = "No information."

// blank fills in the names of the last view without any of its values.
func (f *frontWords) blank(last *View) {
	if last == nil {
		return
	}
	if len(last.Alerts) > 0 {
		// Nothing is said when none was open: it would sound like calm.
		f.Remarks = append(f.Remarks, "An alert was open at the last step worked out.")
	}
	for _, e := range last.Ends {
		f.Ends = append(f.Ends, wordsEnd{Runway: e.Runway, Sentence: noInformation})
	}
	for _, path := range last.Paths {
		f.Paths = append(f.Paths, frontPath{Class: "unknown", Word: "No information", Name: path.Name})
	}
	for _, s := range last.Stations {
		f.Stations = append(f.Stations, Station{ID: s.ID, State: "no information"})
	}
}

// conditionWords is the word, the shape and the meaning of a condition.
func conditionWords(c alerting.Condition) (word, mark, meaning string) {
	switch c {
	case alerting.Observing:
		return "Observing", "full", "Every path is observed where it has to be."
	case alerting.PartlyObserving:
		return "Partly observing", "half", "Some paths are not observed, or not where it matters."
	case alerting.Blind:
		return "Blind", "empty", "No path is observed."
	}
	return "No contact", "none", "Nothing is heard. Read every path as not observed."
}

// alertWords is what an alert looks like: fall and rise are told apart by word
// and colour, the level by word and by the weight of the border.
func alertWords(a Alert) frontAlert {
	f := frontAlert{Class: "other", Word: kindWord(a.Kind), Level: int(a.Level),
		Name:     strings.ReplaceAll(a.Level.String(), "-", " "),
		Observed: a.Observed, Sentence: a.Sentence}
	switch a.Kind {
	case alerting.HeadwindLoss:
		f.Class = "fall"
	case alerting.HeadwindGain:
		f.Class = "rise"
	}
	switch a.Level {
	case alerting.Large:
		f.Class += " level2"
	case alerting.BeyondMargin:
		f.Class += " level3"
	default:
		f.Class += " level1"
	}
	if !a.Observed {
		f.Class += " unseen"
	}
	return f
}

// kindWord says what an alert is about.
func kindWord(k alerting.Kind) string {
	switch k {
	case alerting.HeadwindLoss:
		return "Headwind falls"
	case alerting.HeadwindGain:
		return "Headwind rises"
	}
	name := strings.ReplaceAll(string(k), "-", " ")
	return strings.ToUpper(name[:1]) + name[1:]
}

// pathWords is what a path looks like. There is no state that means good.
func pathWords(p Path) frontPath {
	f := frontPath{Name: p.Name, Sentence: p.Sentence, Unobserved: p.Unobserved}
	switch p.State {
	case alerting.Raised:
		f.Class, f.Word = "raised", "Alert open"
	case alerting.BelowLimits:
		f.Class, f.Word = "below", "Below limits"
	default:
		f.Class, f.Word = "unknown", "Not observed"
	}
	return f
}
