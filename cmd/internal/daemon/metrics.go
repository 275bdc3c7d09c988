package daemon

import (
	"net/http"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/promhttp"

	"midwatch/alert/page/api"
)

// metrics serves OpenMetrics from a registry of its own.
func (d *Daemon) metrics() http.Handler {
	r := prometheus.NewRegistry()
	r.MustRegister(meter{d})
	return promhttp.HandlerFor(r, promhttp.HandlerOpts{EnableOpenMetrics: true})
}

// meter reads the counts when it is asked; nothing is counted twice.
type meter struct{ d *Daemon }

func describe(name, help string, labels ...string) *prometheus.Desc {
	return prometheus.NewDesc("midwatch_"+name, help, labels, nil)
}

var (
	descWell     = describe("well", "1 while the watch is well, as /healthz says.")
	descLoops    = describe("loops", "Loops by state.", "state")
	descCount    = describe("events_total", "What happened since the start.", "event")
	descWaiting  = describe("samples_waiting", "Samples in the rings.")
	descPart     = describe("part_age_seconds", "Time since a part last turned.", "part")
	descAlive    = describe("source_alive", "1 while the source delivers.", "source")
	descLag      = describe("source_lag_seconds", "Arrival less source time, running median.", "source")
	descBytes    = describe("trend_bytes", "Size of all trend files.")
	descFrames   = describe("trend_frames_total", "Frames written.")
	descDropped  = describe("trend_frames_dropped_total", "Frames given up because the disk did not take them.")
	descEpisodes = describe("episodes_open", "Open episodes.")
	descSent     = describe("messages_sent_total", "Messages taken by a sender.", "sender")
	descFailed   = describe("messages_failed_total", "Attempts that failed, by reason.", "sender", "reason")
	descQueued   = describe("messages_queued", "Messages that wait.", "sender")
)

func (m meter) Describe(c chan<- *prometheus.Desc) {
	for _, d := range []*prometheus.Desc{descWell, descLoops, descCount, descWaiting, descPart, descAlive, descLag, descBytes,
		descFrames, descDropped, descEpisodes, descSent, descFailed, descQueued} {
		c <- d
	}
}

func (m meter) Collect(c chan<- prometheus.Metric) {
	gauge := func(d *prometheus.Desc, v float64, labels ...string) {
		c <- prometheus.MustNewConstMetric(d, prometheus.GaugeValue, v, labels...)
	}
	count := func(d *prometheus.Desc, v uint64, labels ...string) {
		c <- prometheus.MustNewConstMetric(d, prometheus.CounterValue, float64(v), labels...)
	}
	yes := map[bool]float64{true: 1}
	well, _ := m.d.Health()
	gauge(descWell, yes[well])
	n := m.d.loopCounts()
	gauge(descLoops, float64(n.Judged), "judged")
	gauge(descLoops, float64(n.CannotJudge), "cannot-judge")
	gauge(descLoops, float64(n.NotNormal), "not-in-normal-mode")
	gauge(descLoops, float64(n.Held), "held")
	k := m.d.counts()
	for event, v := range k.all() {
		count(descCount, v, event)
	}
	gauge(descWaiting, float64(k.waiting))
	now := m.d.clock.ms()
	for _, p := range m.d.parts() {
		gauge(descPart, float64(now-p.last)/1000, p.name)
	}
	for _, s := range m.d.sourceStates() {
		gauge(descAlive, yes[s.Link == linkWatching], s.Name)
		gauge(descLag, float64(s.LagMs)/1000, s.Name)
	}
	gauge(descBytes, float64(k.window.Bytes))
	count(descFrames, k.window.Frames)
	count(descDropped, k.window.Dropped)
	gauge(descEpisodes, float64(len(openOnly(api.Episodes(m.d.desk)))))
	for _, s := range m.d.desk.Senders() {
		count(descSent, s.Sent, s.Name)
		gauge(descQueued, float64(s.Queued), s.Name)
		for r, v := range s.Failed {
			count(descFailed, v, s.Name, string(r))
		}
	}
}
