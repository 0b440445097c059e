package publish

import "sockline/alerting/wording"

// Of is the issue of a notice: what the daemon hands over.
func Of(n wording.Notice) Issue {
	i := Issue{AlertID: n.ID(), Phase: Update, Exercise: n.Exercise(), JSON: func(delayed bool) []byte {
		if delayed {
			return n.WithDelayed().JSON()
		}
		return n.JSON()
	}}
	switch {
	case n.Closing(): // even if it is the first we hear of the alert
		i.Phase = Closing
	case n.Opening():
		i.Phase = Opening
	}
	return i
}
