package main

import (
	"github.com/prometheus/client_golang/prometheus"

	"sockline/alerting/publish/cap"
	"sockline/alerting/publish/webhook"
)

// measure shows on a registry how telling goes: a fixed set of series for each
// webhook and for the spool.
func (t *teller) measure(registry *prometheus.Registry) {
	add := func(total bool, name, help string, labels prometheus.Labels, f func() float64) {
		if total {
			registry.MustRegister(prometheus.NewCounterFunc(prometheus.CounterOpts{Name: "sockline_" + name, Help: help, ConstLabels: labels}, f))
			return
		}
		registry.MustRegister(prometheus.NewGaugeFunc(prometheus.GaugeOpts{Name: "sockline_" + name, Help: help, ConstLabels: labels}, f))
	}
	for _, h := range t.hooks {
		labels := prometheus.Labels{"webhook": h.State().Name}
		of := func(f func(s webhook.State) float64) func() float64 { return func() float64 { return f(h.State()) } }
		add(false, "webhook_waiting_events", "Events that a webhook has not taken yet.", labels, of(func(s webhook.State) float64 { return float64(s.Waiting) }))
		add(false, "webhook_failing", "Whether the last try to tell a webhook failed.", labels, of(func(s webhook.State) float64 { return truth(s.Problem != "") }))
		add(false, "webhook_queue_degraded", "Whether what waits for a webhook is in memory only.", labels, of(func(s webhook.State) float64 { return truth(s.Disk != "") }))
		add(true, "webhook_delivered_events_total", "Events that a webhook has taken.", labels, of(func(s webhook.State) float64 { return float64(s.Delivered) }))
		add(true, "webhook_repeated_tries_total", "Tries beyond the first of an event.", labels, of(func(s webhook.State) float64 { return float64(s.Repeated) }))
		add(true, "webhook_refused_events_total", "Events that a webhook did not want.", labels, of(func(s webhook.State) float64 { return float64(s.Refused) }))
		add(true, "webhook_lost_events_total", "Events given up for their age or number.", labels, of(func(s webhook.State) float64 { return float64(s.Expired + s.Lost) }))
	}
	if t.spool == nil {
		return
	}
	of := func(f func(s cap.SpoolState) float64) func() float64 {
		return func() float64 { return f(t.spool.State()) }
	}
	add(false, "spool_waiting_messages", "Standard alert messages that are not written yet.", nil, of(func(s cap.SpoolState) float64 { return float64(s.Waiting) }))
	add(false, "spool_failing", "Whether the spool takes no messages.", nil, of(func(s cap.SpoolState) float64 { return truth(s.Problem != "") }))
	add(true, "spool_written_messages_total", "Standard alert messages in files.", nil, of(func(s cap.SpoolState) float64 { return float64(s.Written) }))
	add(true, "spool_lost_messages_total", "Standard alert messages given up because too many waited.", nil, of(func(s cap.SpoolState) float64 { return float64(s.Lost) }))
}
