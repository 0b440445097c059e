// Package feed takes the bytes of MQTT sessions and capture files and hands
// out messages, each stamped once with the arrival clock. It also carries
// messages out: to a broker, or into a capture file. It is the only package
// that knows the MQTT client and the embedded broker, and, with the programs
// under cmd, the only one that reads a clock. It knows topics and bytes, never
// wind. Package decode turns its messages into readings.
package feed
