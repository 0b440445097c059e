package synthetic

import (
	"cmp"
	"fmt"
	"slices"

	"sockline/sensors"
)

// Generate gives the scene's messages in order of arrival, as the masts would
// send them: on each station's topic and in its format, every payload marked as
// an exercise. It stops at the first error of yield and returns it.
func (s *Scene) Generate(stations []StationSpec, yield func(sensors.Message) error) error {
	sampler, err := s.NewSampler(stations)
	if err != nil {
		return err
	}
	encoders := make([]encoder, len(stations))
	for i := range stations {
		if encoders[i], err = newEncoder(&sampler.stations[i]); err != nil {
			return fmt.Errorf("synthetic payloads of station %s: %w", stations[i].Station.ID, err)
		}
	}
	var waiting []sensors.Reading // measured but not yet arrived
	flush := func(until sensors.Instant) error {
		slices.SortStableFunc(waiting, func(a, b sensors.Reading) int {
			return cmp.Or(cmp.Compare(a.Arrival, b.Arrival), cmp.Compare(a.Station, b.Station))
		})
		n := 0
		for ; n < len(waiting) && waiting[n].Arrival <= until; n++ {
			r := waiting[n]
			message := sensors.Message{
				Topic:    stations[r.Station].Station.Topic,
				Payload:  encoders[r.Station].encode(r),
				Received: r.Arrival,
			}
			if err := yield(message); err != nil {
				return err
			}
		}
		waiting = append(waiting[:0], waiting[n:]...)
		return nil
	}
	for {
		var more bool
		if waiting, more = sampler.Next(waiting); !more {
			break
		}
		// Nothing measured later can arrive up to this second.
		if err := flush(s.Start + sensors.Instant(sampler.Second())*sensors.Second); err != nil {
			return err
		}
	}
	end := s.Start
	for _, r := range waiting {
		end = max(end, r.Arrival)
	}
	return flush(end)
}
