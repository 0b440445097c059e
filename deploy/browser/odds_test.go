package browser_test

import (
	"bytes"
	"fmt"
	"testing"
	"time"

	"sockline/alerting/page"
	"sockline/alerting/wording"
)

// TestOdds: the page says of a probability what the sentences say, and on the
// plan never that an outflow is certain.
func TestOdds(t *testing.T) {
	t.Parallel()
	s := newStage(t, func(v *page.View) {
		for i, o := range v.Outflows {
			v.Outflows[i] = bytes.Replace(o, []byte(`"probability":0.93`), []byte(`"probability":1`), 1)
		}
	})
	b := open(t, s.url+"/", screens[1])
	b.until(20*time.Second, `document.body.textContent.includes("microburst, over 95 in 100")`)
	if eval[bool](b, `document.body.textContent.includes("100 in 100")`) {
		t.Error("the page says that an outflow is certain")
	}
	build := eval[string](b, `document.documentElement.dataset.build`)
	said := eval[[]string](b, fmt.Sprintf(`import("/assets/%s/words.js").then(({odds}) => Array.from({length: 1001}, (_, i) => odds(i / 1000)))`, build))
	if len(said) != 1001 {
		t.Fatalf("%d answers", len(said))
	}
	for i, got := range said {
		if want := wording.Odds(float64(i) / 1000); got != want {
			t.Errorf("of %g the page says %q, the sentences %q", float64(i)/1000, got, want)
		}
	}
	for _, nothing := range []string{"null", "undefined", "NaN"} {
		if got := eval[string](b, fmt.Sprintf(`import("/assets/%s/words.js").then(({odds}) => odds(%s))`, build, nothing)); got != "an unknown number in 100" {
			t.Errorf("of %s the page says %q", nothing, got)
		}
	}
}
