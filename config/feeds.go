package config

import (
	"fmt"

	"sockline/sensors"
)

// where is the topic of a station's readings, or the topics of each quantity.
func (t *table) where(format sensors.Format, out MQTT) (string, *sensors.FieldTopics) {
	_, one := t.values["topic"]
	if _, each := t.values["topics"]; !each {
		t.asked = append(t.asked, "topics")
		return t.topic("topic", out), nil
	}
	if one {
		t.take("topic")
		t.blame(t.key("topic"), "", "keep one of the two", "topic is for whole readings, topics for one quantity each")
	}
	each := t.table("topics", false)
	if each.absent {
		return "", nil
	}
	topics := &sensors.FieldTopics{Speed: each.topic("speed", out), Direction: each.topic("direction", out)}
	if _, given := each.values["gust"]; given {
		topics.Gust = each.topic("gust", out)
	} else {
		each.asked = append(each.asked, "gust")
	}
	each.done()
	if format != "" && format != sensors.FormatJSON {
		t.add(t.src.key(each.path), each.path, "", "set format to json: a plain number is JSON too", "topics are for the format json only")
	}
	return topics.Speed, topics
}

// uniqueTopics reports a topic that was given before: whose reading would it be?
func (t *table) uniqueTopics(s sensors.Station, seen map[string]int, i int) {
	if s.Topics == nil {
		t.unique("topic", s.Topic, seen, i)
		return
	}
	for k, topic := range s.AllTopics() {
		name := [...]string{"topics.speed", "topics.direction", "topics.gust"}[k]
		if first, ok := seen[topic]; ok && first == i {
			t.blame(t.key(name), topic, "give each quantity its own topic", "two quantities of this station have one topic")
			continue
		}
		t.unique(name, topic, seen, i)
	}
}

// samples checks the place of an array of samples against the other fields.
func (t *table) samples(m *sensors.FieldMap, apart bool) {
	switch {
	case m.Samples == "":
	case apart:
		t.blame(t.key("samples"), m.Samples, "take it out, or write topic for topics", "samples and topics do not go together")
	case m.Time == "":
		t.blame(t.key("samples"), m.Samples, fmt.Sprintf("add time, the place of it in each of %s", m.Samples),
			"samples without a time each would all be of the moment of arrival")
	}
}
