package cap

import (
	"encoding/xml"
	"math"
	"strconv"
	"strings"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors/quantity"
)

// The fields of these types stand in the order that the standard's schema
// demands.

type document struct {
	XMLName     xml.Name `xml:"urn:oasis:names:tc:emergency:cap:1.2 alert"`
	Identifier  string   `xml:"identifier"`
	Sender      string   `xml:"sender"`
	Sent        string   `xml:"sent"`
	Status      string   `xml:"status"`
	MsgType     string   `xml:"msgType"`
	Scope       string   `xml:"scope"`
	Restriction string   `xml:"restriction"`
	Note        string   `xml:"note"`
	References  string   `xml:"references,omitempty"`
	Incidents   string   `xml:"incidents,omitempty"`
	Info        info     `xml:"info"`
}

type info struct {
	Language     string      `xml:"language"`
	Category     []string    `xml:"category"`
	Event        string      `xml:"event"`
	ResponseType string      `xml:"responseType"`
	Urgency      string      `xml:"urgency"`
	Severity     string      `xml:"severity"`
	Certainty    string      `xml:"certainty"`
	Audience     string      `xml:"audience"`
	Effective    string      `xml:"effective"`
	Onset        string      `xml:"onset"`
	Expires      string      `xml:"expires"`
	SenderName   string      `xml:"senderName"`
	Headline     string      `xml:"headline"`
	Description  string      `xml:"description"`
	Parameters   []parameter `xml:"parameter"`
	Area         area        `xml:"area"`
}

type parameter struct {
	Name  string `xml:"valueName"`
	Value string `xml:"value"`
}

type area struct {
	Description string `xml:"areaDesc"`
	Polygon     string `xml:"polygon,omitempty"`
}

// document puts a notice into the elements of the standard.
func (c *Composer) document(n wording.Notice, references []string) document {
	a := n.Alert()
	d := document{
		Identifier: identifier(a.ID, a.Revision), Sender: c.opts.Sender, Sent: stamp(a.Updated),
		Status: "Actual", MsgType: "Update", Scope: "Restricted",
		Restriction: "For those who work at " + c.opts.Airfield.Name + " and for its crews; not for the public.",
		Note:        alerting.Notice, References: strings.Join(references, " "), Incidents: a.Occurrence,
	}
	switch {
	case n.Closing():
		d.MsgType = "Cancel"
	case n.Opening() && d.References == "": // told twice, it is an update
		d.MsgType = "Alert"
	}
	// A closing that is also the opening has nothing to refer to; an Update or
	// a Cancel needs a reference, and the alert's first name is one.
	if d.MsgType != "Alert" && d.References == "" {
		d.References = c.reference(a.ID, 1, a.Opened)
	}
	exercise := n.Exercise() || c.opts.Exercise
	if exercise {
		d.Status, d.Note = "Exercise", "EXERCISE. "+alerting.Notice
	}
	d.Info = c.info(n, &a, exercise)
	return d
}

func (c *Composer) info(n wording.Notice, a *lifecycle.Alert, exercise bool) info {
	i := info{
		Language: "en-GB", Category: []string{"Met", "Transport"}, Event: eventWords(a.Kind),
		ResponseType: "Assess", Urgency: "Immediate", Severity: severity(a.Level), Certainty: certainty(a),
		Audience:  "Tower, crews and operators at " + c.opts.Airfield.Name,
		Effective: stamp(a.Updated), Onset: stamp(a.Opened), Expires: stamp(a.Updated.Add(lapse)),
		SenderName: c.opts.Airfield.Name, Description: n.Text(),
		Headline: upper(eventWords(a.Kind)) + ", " + a.Operation + " " + a.Runway + ", level " + strconv.Itoa(int(a.Level)) + " of 3",
		Parameters: []parameter{
			{"alert", a.ID}, {"runway", a.Runway}, {"operation", a.Operation}, {"kind", string(a.Kind)},
			{"level", a.Level.String()}, {"change_kt", knots(a.Change)}, {"change_low_kt", knots(a.ChangeLow)},
			{"change_high_kt", knots(a.ChangeHigh)}, {"probability", decimals(a.Probability, 2)},
			{"observed", strconv.FormatBool(a.Observed)}, {"recorded", strconv.FormatBool(n.Recorded())},
		},
		Area: c.area(a),
	}
	if a.State == lifecycle.Closed {
		i.Headline += ", closed"
		// There is no response to a closing: least of all that all is well.
		i.ResponseType, i.Urgency = "None", "Past"
		i.Parameters = append(i.Parameters, parameter{"closed_because", string(a.Because)})
	}
	if closedWithout(a) {
		i.Headline += " without knowing whether it has passed"
		i.Urgency = "Unknown"
	}
	if exercise {
		i.Headline = "EXERCISE: " + i.Headline
		i.Event = "EXERCISE: " + i.Event
		// A notice of a live source in an exercise has no prefix of its own.
		if !strings.HasPrefix(i.Description, "EXERCISE") {
			i.Description = "EXERCISE: " + i.Description
		}
	}
	return i
}

// eventWords is a kind as one would say it: "loss of headwind".
func eventWords(k alerting.Kind) string {
	switch k {
	case alerting.HeadwindLoss:
		return "loss of headwind"
	case alerting.HeadwindGain:
		return "gain of headwind"
	case alerting.VerticalShear:
		return "change of the wind with height"
	}
	return strings.ReplaceAll(string(k), "-", " ")
}

// severity puts our three levels on the standard's scale. Extreme is left to
// others: nothing measured at mast height can claim it.
func severity(l alerting.Level) string {
	switch l {
	case alerting.Noticeable:
		return "Minor"
	case alerting.Large:
		return "Moderate"
	case alerting.BeyondMargin:
		return "Severe"
	}
	return "Unknown"
}

// certainty follows the standard's own bound: likely is above 50 %.
func certainty(a *lifecycle.Alert) string {
	switch {
	case !a.Observed || closedWithout(a):
		return "Unknown"
	case a.State == lifecycle.Closed:
		return "Unlikely"
	case a.Probability > 0.5:
		return "Likely"
	}
	return "Possible"
}

const (
	// besidePath is the half width (m) of the strip that an alert is drawn as.
	// It is for finding the place on a map; what is measured is the path.
	besidePath = 500.0
	// leastStretch is the shortest strip (m): a change at one place is a place.
	leastStretch = 200.0
)

// area is the ground of an alert: a strip along its path. A path that is no
// longer there is named and not drawn.
func (c *Composer) area(a *lifecycle.Alert) area {
	r := area{Description: "Path of " + a.Operation + " " + a.Runway + " at " + c.opts.Airfield.Name + ", from " +
		metres(a.From) + " to " + metres(a.To) + " before its threshold, at mast height"}
	p, ok := c.opts.Airfield.Path(a.Runway, a.Operation)
	if !ok {
		return r
	}
	var points []string
	for _, corner := range corners(p, a.From, a.To) {
		lat, lon := c.opts.Airfield.LatLon(corner)
		points = append(points, decimals(lat, 6)+","+decimals(lon, 6))
	}
	r.Polygon = strings.Join(points, " ")
	return r
}

// corners is the strip's outline, closed: its last point is its first.
func corners(p airfield.Path, from, to float64) []airfield.Point {
	from, to = max(from, to), min(from, to)
	if short := leastStretch - (from - to); short > 0 {
		from, to = from+short/2, to-short/2
	}
	var out []airfield.Point
	for _, at := range [][2]float64{{from, -besidePath}, {to, -besidePath}, {to, besidePath}, {from, besidePath}, {from, -besidePath}} {
		x, y := p.Beside(at[0], at[1])
		out = append(out, airfield.Point{X: x, Y: y})
	}
	return out
}

func knots(v float64) string  { return decimals(v/quantity.Knot, 1) }
func metres(v float64) string { return strconv.Itoa(int(math.Round(v/10))*10) + " m" }

func decimals(v float64, n int) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "unknown"
	}
	return strconv.FormatFloat(v, 'f', n, 64)
}

func upper(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}
