package cap

import (
	"bytes"
	"encoding/xml"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os/exec"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

const sender = "sockline@skerrymoor.example"

func field(tb testing.TB) *airfield.Airfield {
	tb.Helper()
	end := func(d string, lat, lon float64) airfield.EndSpec {
		return airfield.EndSpec{Designator: d, Latitude: lat, Longitude: lon, Elevation: 42, GlidePath: airfield.DefaultGlidePath,
			CrossingHeight: airfield.DefaultCrossingHeight, LandingLength: 5000, TakeoffLength: 5000}
	}
	a, err := airfield.New(airfield.Spec{
		ID: "skerrymoor", Name: "Skerry Moor", Latitude: 54, Longitude: -20, Elevation: 42,
		Runways: []airfield.RunwaySpec{{Width: 18, Ends: []airfield.EndSpec{
			end("07", 53.997479, -20.008771), end("25", 54.002520, -19.991228),
		}}},
		Masts: []airfield.MastSpec{{ID: "touch07", Latitude: 53.998763, Longitude: -20.008477, Height: 10}},
	})
	if err != nil {
		tb.Fatal(err)
	}
	return a
}

func composer(tb testing.TB, exercise bool) *Composer {
	tb.Helper()
	c, err := New(Options{Sender: sender, Airfield: field(tb), Exercise: exercise})
	if err != nil {
		tb.Fatal(err)
	}
	return c
}

func opened() sensors.Instant { return sensors.At(time.Date(2026, 7, 1, 14, 15, 3, 0, time.UTC)) }

// alert is an alert as it opens.
func alert() lifecycle.Alert {
	return lifecycle.Alert{
		ID: "skerrymoor-20260701T141503Z-07-landing-headwind-loss", Occurrence: "skerrymoor-20260701T141503Z", Revision: 1,
		Runway: "07", Operation: "landing", Kind: alerting.HeadwindLoss, Level: alerting.Noticeable, State: lifecycle.Open,
		Opened: opened(), Updated: opened(), Change: -12 * quantity.Knot, ChangeLow: -15 * quantity.Knot, ChangeHigh: -9 * quantity.Knot,
		Probability: 0.85, From: 2900, To: 1250, Observed: true, MeasuredAt: opened(), Cause: "unresolved", Trend: lifecycle.Growing,
		PeakChange: -12 * quantity.Knot, PeakAt: opened(), Used: []string{"touch07"},
	}
}

func notice(a lifecycle.Alert, exercise bool) wording.Notice {
	return wording.Of(lifecycle.Transition{At: a.Updated, Alert: a}, wording.Context{Airfield: "skerrymoor", Exercise: exercise})
}

// The order of the elements in CAP 1.2, section 3.2 with the schema of
// section 3.4 (OASIS, 1 July 2010; from memory), without those that this
// program never writes.
var order = map[string][]string{
	"alert": strings.Fields("identifier sender sent status msgType source scope restriction addresses code note references incidents info"),
	"info": strings.Fields("language category event responseType urgency severity certainty audience eventCode effective onset expires " +
		"senderName headline description instruction web contact parameter resource area"),
	"parameter": {"valueName", "value"},
	"area":      strings.Fields("areaDesc polygon circle geocode altitude ceiling"),
}

// The value lists of the same sections.
var values = map[string][]string{
	"status":       strings.Fields("Actual Exercise System Test Draft"),
	"msgType":      strings.Fields("Alert Update Cancel Ack Error"),
	"scope":        strings.Fields("Public Restricted Private"),
	"category":     strings.Fields("Geo Met Safety Security Rescue Fire Health Env Transport Infra CBRNE Other"),
	"responseType": strings.Fields("Shelter Evacuate Prepare Execute Avoid Monitor Assess AllClear None"),
	"urgency":      strings.Fields("Immediate Expected Future Past Unknown"),
	"severity":     strings.Fields("Extreme Severe Moderate Minor Unknown"),
	"certainty":    strings.Fields("Observed Likely Possible Unlikely Unknown"),
}

// required elements, and how many there are at least.
var required = map[string][]string{
	"alert": strings.Fields("identifier sender sent status msgType scope info"),
	"info":  strings.Fields("category event urgency severity certainty area"),
	"area":  {"areaDesc"},
}

var (
	offsetTime = regexp.MustCompile(`^\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d[-+]\d\d:\d\d$`) // section 3.3.2
	identified = regexp.MustCompile(`^[^\s,<&]+$`)
)

// valid checks a message against the standard, and against what this program
// promises beyond it. It returns the text of each element.
func valid(tb testing.TB, text []byte) map[string][]string {
	tb.Helper()
	found := map[string][]string{}
	d := xml.NewDecoder(bytes.NewReader(text))
	type level struct {
		name     string
		children []string
		text     string
	}
	var stack []level
	for {
		token, err := d.Token()
		if err == io.EOF {
			break
		}
		if err != nil {
			tb.Fatalf("%v in\n%s", err, text)
		}
		switch token := token.(type) {
		case xml.StartElement:
			if token.Name.Space != "urn:oasis:names:tc:emergency:cap:1.2" {
				tb.Errorf("%s is in the name space %q", token.Name.Local, token.Name.Space)
			}
			if len(stack) > 0 {
				top := &stack[len(stack)-1]
				top.children = append(top.children, token.Name.Local)
			}
			stack = append(stack, level{name: token.Name.Local})
		case xml.CharData:
			if len(stack) > 0 {
				stack[len(stack)-1].text += string(token)
			}
		case xml.EndElement:
			top := stack[len(stack)-1]
			stack = stack[:len(stack)-1]
			inOrder(tb, top.name, top.children)
			found[top.name] = append(found[top.name], top.text)
			if list := values[top.name]; list != nil && !slices.Contains(list, top.text) {
				tb.Errorf("%s %q is not in the list of the standard", top.name, top.text)
			}
		}
	}
	for _, name := range []string{"sent", "effective", "onset", "expires"} {
		for _, t := range found[name] {
			if !offsetTime.MatchString(t) || strings.HasSuffix(t, "Z") {
				tb.Errorf("%s %q", name, t)
			}
		}
	}
	for _, p := range found["polygon"] {
		closedPolygon(tb, p)
	}
	for _, reference := range strings.Fields(strings.Join(found["references"], " ")) {
		parts := strings.Split(reference, ",")
		if len(parts) != 3 || parts[0] != sender || !offsetTime.MatchString(parts[2]) {
			tb.Errorf("reference %q", reference)
		}
	}
	one := func(name string) string { return strings.Join(found[name], "|") }
	if !identified.MatchString(one("identifier")) || !identified.MatchString(one("sender")) {
		tb.Errorf("identifier %q, sender %q", one("identifier"), one("sender"))
	}
	if one("scope") != "Restricted" || one("restriction") == "" {
		tb.Errorf("scope %s, restriction %q", one("scope"), one("restriction"))
	}
	if one("responseType") == "AllClear" {
		tb.Error("nothing measured at mast height says that all is clear")
	}
	if !strings.HasSuffix(one("note"), alerting.Notice) {
		tb.Errorf("note %q", one("note"))
	}
	if (one("msgType") == "Alert") != (one("references") == "") {
		tb.Errorf("%s with references %q", one("msgType"), one("references"))
	}
	if len(one("headline")) > 160 { // section 3.2.2
		tb.Errorf("headline of %d characters", len(one("headline")))
	}
	return found
}

func inOrder(tb testing.TB, name string, children []string) {
	tb.Helper()
	want, ok := order[name]
	if !ok {
		if len(children) > 0 {
			tb.Errorf("%s has children %v", name, children)
		}
		return
	}
	last := 0
	for _, c := range children {
		at := slices.Index(want, c)
		if at < last {
			tb.Errorf("%s: %s is unknown or out of its order in %v", name, c, children)
		}
		last = at
	}
	for _, r := range required[name] {
		if !slices.Contains(children, r) {
			tb.Errorf("%s lacks %s", name, r)
		}
	}
}

// closedPolygon: at least four points, the last is the first, latitude first.
func closedPolygon(tb testing.TB, p string) {
	tb.Helper()
	points := strings.Fields(p)
	if len(points) < 4 || points[0] != points[len(points)-1] {
		tb.Errorf("polygon %q", p)
	}
	for _, point := range points {
		lat, lon, ok := strings.Cut(point, ",")
		y, err1 := strconv.ParseFloat(lat, 64)
		x, err2 := strconv.ParseFloat(lon, 64)
		if !ok || err1 != nil || err2 != nil || math.Abs(y-54) > 0.2 || math.Abs(x+20) > 0.2 {
			tb.Errorf("point %q is not near the airfield at 54, -20", point)
		}
	}
}

// wellFormed asks an independent reader, where there is one.
func wellFormed(tb testing.TB, text []byte) {
	tb.Helper()
	tool, err := exec.LookPath("xmllint")
	if err != nil {
		tb.Log("NOT TESTED: there is no xmllint on this machine; install libxml2-utils")
		return
	}
	c := exec.Command(tool, "--noout", "-")
	c.Stdin = bytes.NewReader(text)
	if out, err := c.CombinedOutput(); err != nil {
		tb.Errorf("xmllint: %v: %s in\n%s", err, out, text)
	}
}

// TestLife goes through an alert: opening, more of the same, a higher level, a
// minute later, ground lost, closing.
func TestLife(t *testing.T) {
	c := composer(t, false)
	a := alert()
	id := a.ID
	ref := func(revision int, at string) string {
		return fmt.Sprintf("%s,%s-r%05d,2026-07-01T%s-00:00", sender, id, revision, at)
	}
	steps := []struct {
		after      time.Duration
		edit       func(a *lifecycle.Alert)
		kind       string // empty: no message
		references string
		severity   string
		certainty  string
		urgency    string
	}{
		{0, func(*lifecycle.Alert) {}, "Alert", "", "Minor", "Likely", "Immediate"},
		{5 * time.Second, func(*lifecycle.Alert) {}, "", "", "", "", ""},
		{10 * time.Second, func(a *lifecycle.Alert) { a.Level = alerting.BeyondMargin }, "Update", ref(1, "14:15:03"), "Severe", "Likely", "Immediate"},
		{65 * time.Second, func(*lifecycle.Alert) {}, "", "", "", "", ""},
		{70 * time.Second, func(a *lifecycle.Alert) { a.Probability = 0.4 }, "Update", ref(1, "14:15:03") + " " + ref(3, "14:15:13"), "Severe", "Possible", "Immediate"},
		{75 * time.Second, func(a *lifecycle.Alert) { a.Observed = false }, "Update",
			ref(1, "14:15:03") + " " + ref(3, "14:15:13") + " " + ref(5, "14:16:13"), "Severe", "Unknown", "Immediate"},
		{80 * time.Second, func(a *lifecycle.Alert) {
			a.State, a.Closed, a.Because = lifecycle.Closed, a.Updated, lifecycle.NotObserved
		}, "Cancel", ref(1, "14:15:03") + " " + ref(3, "14:15:13") + " " + ref(5, "14:16:13") + " " + ref(6, "14:16:18"), "Severe", "Unknown", "Unknown"},
	}
	for i, s := range steps {
		a.Revision, a.Updated = i+1, opened().Add(s.after)
		s.edit(&a)
		m, ok := c.Of(notice(a, false))
		if ok != (s.kind != "") {
			t.Fatalf("step %d: message %v", i, ok)
		}
		if !ok {
			continue
		}
		found := valid(t, m.XML)
		wellFormed(t, m.XML)
		for name, want := range map[string]string{
			"identifier": m.ID, "status": "Actual", "msgType": s.kind, "references": s.references,
			"severity": s.severity, "certainty": s.certainty, "urgency": s.urgency,
		} {
			if got := strings.Join(found[name], "|"); got != want {
				t.Errorf("step %d: %s is %q, want %q", i, name, got, want)
			}
		}
		if m.ID != fmt.Sprintf("%s-r%05d", id, i+1) || m.Opening != (s.kind == "Alert") || m.Closing != (s.kind == "Cancel") {
			t.Errorf("step %d: %+v", i, m)
		}
	}
	if len(c.open) != 0 || len(c.order) != 0 {
		t.Errorf("%d alerts are remembered after their closing", len(c.open))
	}
}

// The polygon holds the whole stretch of the path and not the ground beyond.
func TestGround(t *testing.T) {
	f := field(t)
	p, _ := f.Path("07", "landing")
	m, _ := composer(t, false).Of(notice(alert(), false))
	var outline []airfield.Point
	for _, pair := range strings.Fields(valid(t, m.XML)["polygon"][0]) {
		lat, lon, _ := strings.Cut(pair, ",")
		y, _ := strconv.ParseFloat(lat, 64)
		x, _ := strconv.ParseFloat(lon, 64)
		outline = append(outline, f.Locate(y, x))
	}
	// 2900 to 1250 m before the threshold, 500 m to each side.
	want := [][2]float64{{2900, -500}, {1250, -500}, {1250, 500}, {2900, 500}, {2900, -500}}
	for i, o := range outline {
		s, right := p.Along(o.X, o.Y)
		if math.Abs(s-want[i][0]) > 0.5 || math.Abs(right-want[i][1]) > 0.5 { // six decimals of a degree are 0.1 m
			t.Errorf("corner %d lies at %.1f, %.1f; want %v", i, s, right, want[i])
		}
	}
	a := alert()
	a.From, a.To = 1000, 1000 // a change at one place still has ground
	m, _ = composer(t, false).Of(notice(a, false))
	if points := strings.Fields(valid(t, m.XML)["polygon"][0]); points[0] == points[1] {
		t.Error("the ground of a change at one place is a line")
	}
	a.Runway = "13" // withdrawn since
	m, _ = composer(t, false).Of(notice(a, false))
	if found := valid(t, m.XML); len(found["polygon"]) != 0 || !strings.Contains(found["areaDesc"][0], "13") {
		t.Errorf("%v", found["areaDesc"])
	}
}

func TestExercise(t *testing.T) {
	for name, m := range map[string]func() (Message, bool){
		"of the daemon": func() (Message, bool) { return composer(t, true).Of(notice(alert(), false)) },
		"of the alert":  func() (Message, bool) { return composer(t, false).Of(notice(alert(), true)) },
	} {
		m, ok := m()
		found := valid(t, m.XML)
		if !ok || !m.Exercise || found["status"][0] != "Exercise" {
			t.Errorf("%s: %+v", name, found["status"])
		}
		for _, element := range []string{"note", "headline", "event", "description"} {
			if !strings.HasPrefix(found[element][0], "EXERCISE") || strings.Count(found[element][0], "EXERCISE") != 1 {
				t.Errorf("%s: %s %q", name, element, found[element][0])
			}
		}
	}
}

// After a restart an alert goes on under names that its receivers know.
func TestGoesOnAfterARestart(t *testing.T) {
	a := alert()
	a.Revision, a.Updated = 40, opened().Add(3*time.Minute)
	m, ok := composer(t, false).Of(notice(a, false))
	if found := valid(t, m.XML); !ok || found["msgType"][0] != "Update" || found["references"][0] != sender+","+a.ID+"-r00001,2026-07-01T14:15:03-00:00" {
		t.Errorf("%v", found["references"])
	}
	a.State, a.Closed, a.Because = lifecycle.Closed, a.Updated, lifecycle.ExpiredWhileDown
	m, ok = composer(t, false).Of(notice(a, false))
	if found := valid(t, m.XML); !ok || found["msgType"][0] != "Cancel" {
		t.Errorf("%v", found["msgType"])
	}
}

// TestRandomAlerts: whatever an alert holds, the message is valid.
func TestRandomAlerts(t *testing.T) {
	const seed = 7
	r := rand.New(rand.NewPCG(seed, 0))
	c := composer(t, false)
	for i := range 500 {
		a := alert()
		a.ID = fmt.Sprintf("skerrymoor-%d", r.IntN(20))
		a.Revision = 1 + r.IntN(3)
		a.Updated = a.Opened.Add(time.Duration(r.IntN(4000)) * time.Second)
		a.Kind = []alerting.Kind{alerting.HeadwindLoss, alerting.HeadwindGain, "wind-shift"}[r.IntN(3)]
		a.Operation = []string{"landing", "take-off"}[r.IntN(2)]
		a.Level = alerting.Level(1 + r.IntN(3))
		a.From, a.To = -7000+12000*r.Float64(), -7000+12000*r.Float64()
		a.Change, a.Probability = 30*r.NormFloat64(), r.Float64()
		a.Observed = r.IntN(2) == 0
		if r.IntN(20) == 0 {
			a.Change, a.FBar = math.NaN(), math.Inf(1)
		}
		if r.IntN(3) == 0 {
			a.State, a.Closed = lifecycle.Closed, a.Updated
			a.Because = []lifecycle.CloseReason{lifecycle.BelowLevel, lifecycle.NotObserved, lifecycle.PathWithdrawn, lifecycle.ExpiredWhileDown}[r.IntN(4)]
		}
		if m, ok := c.Of(notice(a, r.IntN(2) == 0)); ok {
			valid(t, m.XML)
		}
		if t.Failed() {
			t.Fatalf("seed %d, alert %d: %+v", seed, i, a)
		}
	}
}

func TestBoundedMemory(t *testing.T) {
	c := composer(t, false)
	a := alert()
	for i := range 3 * maxReferences {
		a.Revision, a.Updated = i+1, opened().Add(time.Duration(i)*updateEvery)
		c.Of(notice(a, false))
	}
	if got := c.open[a.ID].references; len(got) != maxReferences || !strings.Contains(got[0], "-r00001,") {
		t.Errorf("%d references, first %s", len(got), got[0])
	}
	for i := range maxTracked + 10 {
		a.ID, a.Revision = fmt.Sprintf("a%d", i), 1
		c.Of(notice(a, false))
	}
	if len(c.open) != maxTracked || len(c.order) != maxTracked {
		t.Errorf("%d and %d alerts are remembered", len(c.open), len(c.order))
	}
}

func TestSenders(t *testing.T) {
	for s, good := range map[string]bool{
		sender: true, "urn:oid:2.49.0.0.999": true, "": false, "two words": false, "a,b": false, "a<b": false, "a&b": false, "sk\u00e9rry": false,
	} {
		if err := CheckSender(s); (err == nil) != good {
			t.Errorf("%q: %v", s, err)
		}
	}
	if _, err := New(Options{Sender: sender}); err == nil {
		t.Error("a composer without an airfield is made")
	}
}
