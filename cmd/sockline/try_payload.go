package main

import (
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"

	"sockline/sensors"
	"sockline/sensors/decode"
)

// payloadList is what --payload gave, in order.
type payloadList []string

// String is the default, which is none.
func (l *payloadList) String() string { return "" }

// Set adds one.
func (l *payloadList) Set(s string) error {
	*l = append(*l, s)
	return nil
}

// pasted tries messages from the command line. Of a station with one topic each
// is told by itself. Where each quantity has its own, they arrive together, and
// what they make is told once.
func (t *trial) pasted(payloads []string) error {
	now := sensors.At(t.p.now())
	var readings []sensors.Reading
	var all decode.Rejections
	for _, text := range payloads {
		topic, rest, err := t.topicOf(text)
		if err != nil {
			return err
		}
		payload, err := t.bytesOf(rest)
		if err != nil {
			return err
		}
		m := sensors.Message{Topic: topic, Payload: payload, Received: now}
		if t.station.Topics == nil {
			if err := t.show(m, false); err != nil {
				return err
			}
			continue
		}
		var refused decode.Rejections
		readings, err = t.decoder.Decode(readings, m, t.variation)
		if errors.As(err, &refused) {
			all = append(all, refused...)
		}
	}
	if t.station.Topics == nil {
		return nil
	}
	var refused decode.Rejections
	readings, err := t.decoder.Release(readings, now, t.variation) // without a gust, as when its step closes
	if errors.As(err, &refused) {
		all = append(all, refused...)
	}
	if len(all) > 0 {
		return t.tell(readings, all, now, false)
	}
	return t.tell(readings, nil, now, false)
}

// topicOf takes the quantity off a pasted payload, where a station has a topic
// for each.
func (t *trial) topicOf(text string) (topic, payload string, err error) {
	topics := t.station.Topics
	if topics == nil {
		return t.station.Topic, text, nil
	}
	known := []struct{ quantity, topic string }{{"speed", topics.Speed}, {"direction", topics.Direction}, {"gust", topics.Gust}}
	for _, k := range known {
		if rest, ok := strings.CutPrefix(text, k.quantity+":"); ok && k.topic != "" {
			return k.topic, rest, nil
		}
	}
	return "", "", usagef("--payload %.20q: this station has a topic for each quantity; begin with speed: or direction:%s",
		text, map[bool]string{true: " or gust:"}[topics.Gust != ""])
}

// bytesOf is the payload that a text stands for.
func (t *trial) bytesOf(text string) ([]byte, error) {
	// One byte more than can be a message shows that it is too long.
	const most = decode.MaxPayload + 1
	switch digits, isHex := strings.CutPrefix(text, "hex:"); {
	case text == "-":
		payload, err := io.ReadAll(io.LimitReader(t.p.stdin, most))
		if err != nil {
			return nil, fmt.Errorf("read the message from standard input: %w", err)
		}
		return payload, nil
	case strings.HasPrefix(text, "@"):
		f, err := os.Open(text[1:])
		if err != nil {
			return nil, fmt.Errorf("read the message: %w", err)
		}
		defer f.Close() // only read from
		payload, err := io.ReadAll(io.LimitReader(f, most))
		if err != nil {
			return nil, fmt.Errorf("read the message: %w", err)
		}
		return payload, nil
	case isHex:
		payload, err := hex.DecodeString(strings.Join(strings.FieldsFunc(digits, func(r rune) bool { return r == ' ' || r == ':' }), ""))
		if err != nil {
			return nil, usagef("--payload hex:%.20s: %v: write two hexadecimal digits for each byte", digits, err)
		}
		return payload, nil
	}
	return []byte(text), nil
}
