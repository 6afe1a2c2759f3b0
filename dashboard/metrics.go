package dashboard

import (
	"errors"
	"net/http"
	"strings"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"github.com/prometheus/client_golang/prometheus/promhttp"

	"throatwatch/ingest"
	"throatwatch/rules/pipeline"
)

// Metric is a figure of a part that the server does not know.
type Metric struct {
	Name   string // throatwatch_…
	Help   string
	Total  bool // a counter, not a gauge
	Labels map[string]string
	Value  float64
}

// collector makes metrics of one look at the watch.
type collector struct {
	build   string
	status  pipeline.Status
	viewers int
	extra   []Metric
}

// Describe announces nothing: the metrics follow from what is there.
func (c *collector) Describe(chan<- *prometheus.Desc) {}

// Collect gives the metrics.
func (c *collector) Collect(out chan<- prometheus.Metric) {
	send := func(m Metric) {
		kind := prometheus.GaugeValue
		if m.Total {
			kind = prometheus.CounterValue
		}
		names, values := []string{}, []string{}
		for k, v := range m.Labels { // one metric's labels: the library sorts them
			names, values = append(names, k), append(values, strings.ToValidUTF8(v, "\uFFFD"))
		}
		out <- prometheus.MustNewConstMetric(prometheus.NewDesc("throatwatch_"+m.Name, m.Help, names, nil), kind, m.Value, values...)
	}
	st := &c.status
	total := func(name, help string, v uint64) {
		send(Metric{Name: name, Help: help, Total: true, Value: float64(v)})
	}
	send(Metric{Name: "build_info", Help: "1, with the build that watches.", Labels: map[string]string{"build": c.build}, Value: 1})
	total("messages_total", "MQTT messages stepped.", st.Messages)
	total("samples_total", "Samples that fell into a scan.", st.Samples)
	total("scans_total", "Scans computed.", st.Scans)
	total("scans_skipped_total", "Scans left out over gaps without any data.", st.Skipped)
	for r := ingest.ReasonNone + 1; r < ingest.NumReasons; r++ {
		send(Metric{
			Name: "not_used_total", Help: "Messages and samples not used, or used with a doubt, by reason.", Total: true,
			Labels: map[string]string{"reason": r.String()}, Value: float64(st.Counters[r]),
		})
	}
	for i := range st.Sources {
		s := &st.Sources[i]
		labels := map[string]string{"topic": s.Topic}
		send(Metric{Name: "source_age_seconds", Help: "Host time since the newest message of a source.", Labels: labels, Value: seconds(s.Age)})
		send(Metric{Name: "source_skew_seconds", Help: "Host time less event time of the newest sample of a source.", Labels: labels, Value: seconds(s.Skew)})
	}
	send(Metric{Name: "data_age_seconds", Help: "Host time less the newest event time; NaN without data.", Value: age(st.DataAge)})
	gauge := func(name, help string, v bool) {
		send(Metric{Name: name, Help: help, Value: map[bool]float64{true: 1}[v]})
	}
	gauge("recording", "1 while records are stored.", st.Health.NotRecordingSince == 0)
	gauge("input_path", "1 while probe messages come back.", !st.Health.InputPathDeaf)
	gauge("run_active", "1 while a run is on.", st.RunActive)
	gauge("catching_up", "1 while data of the past come in.", st.CatchingUp)
	send(Metric{Name: "rules_unknown", Help: "Rules that cannot be judged now.", Value: float64(st.Unknown)})
	send(Metric{Name: "viewers", Help: "Websocket connections.", Value: float64(c.viewers)})
	for _, m := range c.extra {
		send(m)
	}
}

// metrics answers in the Prometheus text format.
func (s *Server) metrics(w http.ResponseWriter, r *http.Request) error {
	c := &collector{build: s.cfg.Build, viewers: s.hub.Viewers()}
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) { c.status = m.Status(st) }); err != nil {
		return err
	}
	if s.cfg.Extra != nil {
		c.extra = s.cfg.Extra()
	}
	reg := prometheus.NewRegistry()
	process := collectors.NewProcessCollector(collectors.ProcessCollectorOpts{Namespace: "throatwatch"})
	if err := errors.Join(reg.Register(c), reg.Register(process)); err != nil {
		return err
	}
	promhttp.HandlerFor(reg, promhttp.HandlerOpts{}).ServeHTTP(w, r)
	return nil
}
