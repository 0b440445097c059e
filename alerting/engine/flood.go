package engine

import (
	"fmt"

	"sockline/sensors"
	"sockline/sensors/decode"
)

// What a station may send. No anemometer comes near it: the fastest stations
// report twenty times a second, and an agent that catches up after an outage
// sends twenty messages a second of a hundred readings each. What goes beyond
// is a fault or an attack, and is refused before it is looked at, so that the
// other stations are served as fast as ever.
const (
	// MessageRate is how many messages a second a station may send on each of
	// its topics in the long run.
	MessageRate = 50
	// messageBurst is how many may come at once, as they do when a connection
	// has been held up: four seconds' worth.
	messageBurst = 4 * MessageRate
	// readingRate is how many readings a second they may hold, over all topics.
	readingRate = 5000
	// readingBurst holds the largest message.
	readingBurst = readingRate

	msPerSecond = 1000
)

// allowance is what a station may still send: two buckets of tokens that are
// filled by the arrival stamps, so that a replay refuses the same messages.
// Levels are in thousandths of a token: a millisecond adds rate of them.
type allowance struct {
	station  string
	topics   int64
	last     sensors.Instant
	messages int64
	readings int64
	refusal  decode.Rejections // made once: a flood must not cost memory
}

func newAllowances(stations []sensors.Station) []allowance {
	all := make([]allowance, len(stations))
	for i, s := range stations {
		topics := int64(len(s.AllTopics()))
		all[i] = allowance{
			station: s.ID, topics: topics,
			messages: topics * messageBurst * msPerSecond, readings: readingBurst * msPerSecond,
			refusal: decode.Rejections{{
				Reason: decode.Flood, Count: 1,
				Detail: fmt.Sprintf("station %s sends more than %d messages a second; the rest is thrown away unread", s.ID, topics*MessageRate),
			}},
		}
	}
	return all
}

// message takes a message that arrived at a stamp; the error is what to say of
// one too many. Stamps do not go back.
func (a *allowance) message(at sensors.Instant) error {
	// Any longer pause fills both buckets anyway; the bound keeps the products
	// below within an int64 whatever the stamps are.
	passed := min(max(int64(at-a.last), 0), int64(messageBurst/MessageRate)*msPerSecond)
	a.last = at
	a.messages = min(a.messages+passed*a.topics*MessageRate, a.topics*messageBurst*msPerSecond)
	a.readings = min(a.readings+passed*readingRate, readingBurst*msPerSecond)
	if a.messages < msPerSecond {
		return a.refusal
	}
	a.messages -= msPerSecond
	return nil
}

// reading takes one reading; false if it is one too many.
func (a *allowance) reading() bool {
	if a.readings < msPerSecond {
		return false
	}
	a.readings -= msPerSecond
	return true
}

func tooManyReadings(rest int) error {
	return decode.Rejections{{
		Reason: decode.Flood, Count: rest,
		Detail: fmt.Sprintf("a station sends more than %d readings a second; the rest is thrown away", readingRate),
	}}
}

// release takes the readings of step t that wait in a decoder for a gust on a
// topic of its own, which has not come in time.
func (e *Engine) release(t sensors.Instant) {
	for _, station := range e.joining {
		var err error
		e.scratch, err = e.decoders[station].Release(e.scratch[:0], t, e.variation(t))
		if err != nil {
			e.counts.rejected(station, err)
		}
		for _, r := range e.scratch {
			e.Offer(r)
		}
	}
}
