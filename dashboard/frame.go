package dashboard

import (
	"encoding/json"
	"math"
	"slices"
	"strconv"
	"time"

	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// apiVersion is the version of the frames.
const apiVersion = 1

// EncodeFrame gives the frame of an outcome as it goes over the websocket; ok is
// false for an outcome that has none there. Channels frames depend on the viewer
// and are not among them.
func EncodeFrame(o *pipeline.Outcome, cfg *pipeline.Config) (body []byte, kind string, ok bool) {
	return appendFrame(nil, o, cfg)
}

// appendFrame writes the frame of an outcome; ok is false for an outcome that has
// none. Channels frames are made by appendChannels, for the ids that are wanted.
func appendFrame(dst []byte, o *pipeline.Outcome, cfg *pipeline.Config) (body []byte, kind string, ok bool) {
	switch o.Kind {
	case pipeline.OutcomePoint:
		kind = "operating_point"
		dst = appendPoint(open(dst, kind, o), o.Point, cfg)
	case pipeline.OutcomeAlarm:
		kind = "alarm"
		dst = member(open(dst, kind, o), "alarm", o.Alarm)
	case pipeline.OutcomeLedger:
		kind = "ledger"
		dst = appendBands(open(dst, kind, o), "bands", o.Ledger)
	case pipeline.OutcomeStatus:
		kind = "status"
		dst = appendStatus(open(dst, kind, o), o.Status)
	case pipeline.OutcomeMark:
		kind = "mark"
		dst = member(open(dst, kind, o), "mark", o.Mark)
	case pipeline.OutcomeChecks:
		kind = "checks"
		dst = member(open(dst, kind, o), "checks", o.Check)
	case pipeline.OutcomeLog:
		kind = "log"
		dst = member(open(dst, kind, o), "entry", o.Entry)
	case pipeline.OutcomeCard:
		kind = "card"
		dst = member(open(dst, kind, o), "card", o.Card.Shown(false))
	case pipeline.OutcomeCardPoint:
		kind = "card_point"
		dst = member(open(dst, kind, o), "point", o.Taken)
	case pipeline.OutcomeRun:
		kind = "run"
		dst = member(text(open(dst, kind, o), "event", o.Event), "run", runView(o.Run))
	case pipeline.OutcomeConfig:
		if o.Event == pipeline.ConfigKept {
			return dst, "", false
		}
		kind = "config"
		dst = member(open(dst, kind, o), "config", o.Config)
	case pipeline.OutcomeChannels, pipeline.OutcomeQuarantine, pipeline.OutcomeAction, pipeline.OutcomeReduction,
		pipeline.OutcomeExceedance, pipeline.OutcomeEngine, pipeline.OutcomeLife:
		return dst, "", false
	}
	return append(dst, '}'), kind, true
}

// open begins a frame.
func open(dst []byte, kind string, o *pipeline.Outcome) []byte {
	dst = append(dst, `{"kind":"`...)
	dst = append(dst, kind...)
	dst = append(dst, `","epoch":`...)
	dst = strconv.AppendUint(dst, o.Epoch, 10)
	dst = append(dst, `,"n":`...)
	dst = strconv.AppendUint(dst, o.N, 10)
	return instant(dst, "t", o.T)
}

// member appends a member of any type.
func member(dst []byte, key string, v any) []byte {
	b, err := json.Marshal(v)
	if err != nil {
		panic("dashboard: " + key + ": " + err.Error()) // our own types encode
	}
	return append(name(dst, key), b...)
}

func name(dst []byte, key string) []byte {
	dst = append(dst, ',', '"')
	dst = append(dst, key...)
	return append(dst, '"', ':')
}

// number appends a member; NaN and infinity are null.
func number(dst []byte, key string, v float64) []byte {
	return float(name(dst, key), v)
}

func float(dst []byte, v float64) []byte {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return append(dst, "null"...)
	}
	return strconv.AppendFloat(dst, v, 'g', -1, 64)
}

func count(dst []byte, key string, v int64) []byte {
	return strconv.AppendInt(name(dst, key), v, 10)
}

func truth(dst []byte, key string, v bool) []byte {
	return strconv.AppendBool(name(dst, key), v)
}

// list appends an array of n items.
func list(dst []byte, key string, n int, item func(dst []byte, i int) []byte) []byte {
	dst = append(name(dst, key), '[')
	for i := range n {
		if i > 0 {
			dst = append(dst, ',')
		}
		dst = item(dst, i)
	}
	return append(dst, ']')
}

// text appends a member whose value may hold anything.
func text(dst []byte, key, v string) []byte { return quoted(name(dst, key), v) }

// quoted appends a JSON string.
func quoted(dst []byte, v string) []byte {
	for i := range len(v) {
		if c := v[i]; c < ' ' || c == '"' || c == '\\' || c >= 0x80 {
			b, err := json.Marshal(v)
			if err != nil {
				panic("dashboard: string: " + err.Error()) // every string encodes
			}
			return append(dst, b...)
		}
	}
	return append(append(append(dst, '"'), v...), '"')
}

// instant appends a time as RFC 3339 UTC with nanoseconds; 0 is null.
func instant(dst []byte, key string, ns int64) []byte {
	dst = name(dst, key)
	if ns == 0 {
		return append(dst, "null"...)
	}
	dst = append(dst, '"')
	dst = time.Unix(0, ns).UTC().AppendFormat(dst, time.RFC3339Nano)
	return append(dst, '"')
}

func appendPoint(dst []byte, p *monitor.OperatingPoint, cfg *pipeline.Config) []byte {
	dst = count(dst, "scan", int64(p.Scan))
	for q := range monitor.NumQuantities {
		dst = number(dst, q.Info().Name, p.V[q])
	}
	dst = text(dst, "choke_state", p.Choke.String())
	dst = truth(dst, "choke_marginal", p.ChokeMarginal)
	dst = truth(dst, "choke_armed", p.ChokeArmed)
	dst = name(dst, "choke_armed_by")
	if p.ArmedBy == monitor.ByNobody {
		dst = append(dst, "null"...)
	} else {
		dst = quoted(dst, p.ArmedBy.String())
	}
	dst = truth(dst, "lit", p.Lit)
	dst = text(dst, "phase", p.Phase.String())
	dst = text(dst, "back_pressure_from", p.BackFrom.String())
	dst = text(dst, "total_pressure_from", p.PressureBy.String())
	dst = text(dst, "total_temperature_from", p.TemperatureBy.String())
	dst = text(dst, "choke_npr_from", p.ChokeNPRFrom.String())
	dst = truth(dst, "steady", p.Steady)
	dst = reason(dst, "steady_reason", p.NotSteady)
	dst = reason(dst, "choke_loss_reason", p.NoChokeLoss)
	dst = reason(dst, "egt_limit_reason", p.NoEGTLimit)
	dst = count(dst, "egt_probes_used", int64(p.EGTProbesUsed))
	dst = count(dst, "rake_probes_used", int64(p.RakeProbesUsed))
	dst = cause(dst, "cause", p.Cause, cfg)
	dst = cause(dst, "egt_cause", p.EGTCause, cfg)
	dst = append(name(dst, "warnings"), '[')
	first := true
	for w := range p.Warnings.Each {
		if !first {
			dst = append(dst, ',')
		}
		first = false
		dst = quoted(dst, w)
	}
	return append(dst, ']')
}

// reason appends the code of a reason, or null when there is none.
func reason(dst []byte, key string, r monitor.Reason) []byte {
	if r == monitor.NoReason {
		return append(name(dst, key), "null"...)
	}
	return text(dst, key, r.String())
}

func cause(dst []byte, key string, c monitor.Cause, cfg *pipeline.Config) []byte {
	switch {
	case c.Kind == monitor.Available:
		return append(name(dst, key), "null"...)
	case c.Kind == monitor.ChannelBad && int(c.Channel) < len(cfg.Compute.Channels):
		return text(dst, key, cfg.Compute.Channels[c.Channel].ID+" "+c.Quality.String())
	}
	return text(dst, key, c.Kind.String())
}

// appendChannels writes the channels frame for the channels wanted, by index.
func appendChannels(dst []byte, o *pipeline.Outcome, cfg *pipeline.Config, wanted []int) []byte {
	dst = append(name(open(dst, "channels", o), "channels"), '{')
	scan := o.Scan
	for k, i := range wanted {
		if k > 0 {
			dst = append(dst, ',')
		}
		dst = append(quoted(dst, cfg.Compute.Channels[i].ID), `:{"value":`...)
		dst = float(dst, scan.Value[i])
		dst = number(dst, "raw", scan.Raw[i])
		dst = text(dst, "quality", scan.Quality[i].String())
		dst = number(dst, "age_s", age(scan.Age[i]))
		dst = text(dst, "finding", scan.Finding[i].Kind.String())
		dst = truth(dst, "proven", scan.Finding[i].Proven)
		dst = append(text(dst, "calibration", cfg.Compute.Channels[i].RecordAt(scan.T).State(scan.T).String()), '}')
	}
	return append(dst, '}', '}')
}

func appendBands(dst []byte, key string, bands []pipeline.Allowance) []byte {
	return list(dst, key, len(bands), func(dst []byte, i int) []byte {
		b := &bands[i]
		dst = appendBand(dst, b)
		dst = number(dst, "elapsed_s", seconds(b.Elapsed))
		dst = number(dst, "assumed_s", seconds(b.Assumed))
		dst = number(dst, "run_total_s", seconds(b.Total))
		dst = truth(dst, "holds", b.Holds)
		dst = truth(dst, "over", b.Over)
		dst = truth(dst, "exceeded", b.Exceeded)
		peak := math.NaN()
		if b.RunPeak > 0 {
			peak = b.RunPeak
		}
		dst = number(dst, "peak_k", peak)
		return append(count(dst, "excursions", int64(b.Excursions)), '}')
	})
}

// appendBand writes what a band is, without closing the object.
func appendBand(dst []byte, b *pipeline.Allowance) []byte {
	dst = quoted(append(dst, `{"name":`...), b.Band.Name)
	dst = text(dst, "kind", b.Kind.String())
	dst = number(dst, "limit_k", b.Limit)
	dst = number(dst, "allowance_s", seconds(b.Allowance))
	return number(dst, "per_run_s", seconds(b.PerRun))
}

func seconds(ns int64) float64 { return float64(ns) / 1e9 }

// age gives seconds, NaN for a negative time.
func age(ns int64) float64 {
	if ns < 0 {
		return math.NaN()
	}
	return seconds(ns)
}

func appendStatus(dst []byte, st *pipeline.Status) []byte {
	dst = instant(dst, "host_time", st.Host)
	dst = number(dst, "data_age_s", age(st.DataAge))
	dst = truth(dst, "catching_up", st.CatchingUp)
	dst = truth(dst, "recording", st.Health.NotRecordingSince == 0)
	dst = instant(dst, "not_recording_since", st.Health.NotRecordingSince)
	dst = truth(dst, "input_path", !st.Health.InputPathDeaf)
	dst = truth(dst, "clock", st.Skew == 0)
	dst = failure(dst, "webhook", &st.Health.Webhook)
	dst = failure(dst, "database", &st.Health.Database)
	dst = failure(dst, "disk", &st.Health.Disk)
	dst = number(dst, "clock_skew_s", seconds(st.Skew))
	dst = truth(dst, "run_active", st.RunActive)
	dst = count(dst, "rules_unknown", int64(st.Unknown))
	dst = list(dst, "sources", len(st.Sources), func(dst []byte, i int) []byte {
		src := &st.Sources[i]
		dst = quoted(append(dst, `{"topic":`...), src.Topic)
		dst = truth(dst, "alive", src.Alive)
		dst = number(dst, "age_s", seconds(src.Age))
		dst = count(dst, "messages", int64(src.Messages))
		dst = truth(dst, "skewed", src.Skewed)
		return append(number(dst, "skew_s", seconds(src.Skew)), '}')
	})
	dst = list(dst, "sessions", len(st.Sessions), func(dst []byte, i int) []byte {
		dst = quoted(append(dst, `{"filter":`...), st.Sessions[i].Filter)
		return append(truth(dst, "connected", st.Sessions[i].Connected), '}')
	})
	dst = append(name(dst, "counters"), `{"messages":`...)
	dst = strconv.AppendUint(dst, st.Messages, 10)
	dst = count(dst, "samples", int64(st.Samples))
	dst = count(dst, "scans", int64(st.Scans))
	dst = count(dst, "scans_skipped", int64(st.Skipped))
	for r := ingest.ReasonNone + 1; r < ingest.NumReasons; r++ {
		dst = count(dst, r.String(), int64(st.Counters[r]))
	}
	return append(dst, '}')
}

// failureJSON says that a part does not work.
type failureJSON struct {
	Since  string  `json:"since"`
	Why    string  `json:"why"`
	Behind float64 `json:"behind"`
}

// failure appends null while a part works.
func failure(dst []byte, key string, p *pipeline.Part) []byte {
	if p.Since == 0 {
		return append(name(dst, key), "null"...)
	}
	return member(dst, key, failureJSON{rfc3339(p.Since), p.Why, p.Behind})
}

// runJSON is a run as frames and HTTP show it.
type runJSON struct {
	ID      string  `json:"id"`
	Number  uint64  `json:"number"`
	Rig     string  `json:"rig"`
	Engine  string  `json:"engine"`
	Started string  `json:"started"`
	Ended   *string `json:"ended"`
	By      string  `json:"by"`

	identityJSON
}

// identityJSON says of what a run is a run.
type identityJSON struct {
	Designation  string `json:"designation"` // number by the rig file's scheme, "" = none
	Test         string `json:"test"`
	Purpose      string `json:"purpose"`
	EngineBuild  string `json:"engine_build"`
	NozzleSerial string `json:"nozzle_serial"`
	FuelBatch    string `json:"fuel_batch"`
	Aborted      bool   `json:"aborted"` // it ended, and its start had not reached idle
}

func rfc3339(ns int64) string { return time.Unix(0, ns).UTC().Format(time.RFC3339Nano) }

func optional(ns int64) *string {
	if ns == 0 {
		return nil
	}
	s := rfc3339(ns)
	return &s
}

func runView(r *monitor.Run) runJSON {
	return runJSON{
		ID: r.ID, Number: r.Number, Rig: r.Rig, Engine: r.Engine, Started: rfc3339(r.Started), Ended: optional(r.Ended), By: r.By,
		identityJSON: identityJSON{r.Designation, r.Test, r.Purpose, r.EngineBuild, r.NozzleSerial, r.FuelBatch, r.Aborted},
	}
}

// channelJSON is what hello says of a channel.
type channelJSON struct {
	ID           string  `json:"id"`
	Title        string  `json:"title"`
	Unit         string  `json:"unit"`
	Dimension    string  `json:"dimension"`
	Reference    string  `json:"reference"`
	Low          float64 `json:"low"`
	High         float64 `json:"high"`
	RecordedOnly bool    `json:"recorded_only"`
	Station      string  `json:"station"`

	Sensor *sensorJSON  `json:"sensor"` // null = nothing is on file
	Swaps  []sensorJSON `json:"swaps"`  // that took its place, by the rig file
}

// sensorJSON is what is on file of a sensor. Dates are YYYY-MM-DD, "" = not stated.
type sensorJSON struct {
	ValidFrom   *string     `json:"valid_from"` // of its first sample; null = from the beginning
	Serial      string      `json:"serial"`
	Certificate string      `json:"certificate"`
	Calibrated  string      `json:"calibrated"`
	Due         string      `json:"due"`
	Waiver      *waiverJSON `json:"waiver"`
}

type waiverJSON struct {
	Who   string `json:"who"`
	Why   string `json:"why"`
	Until string `json:"until"`
}

func sensorView(r *calib.Record, from int64) sensorJSON {
	v := sensorJSON{ValidFrom: optional(from), Serial: r.Serial, Certificate: r.Certificate, Calibrated: r.Calibrated, Due: r.Due}
	if r.Waiver.Who != "" {
		v.Waiver = &waiverJSON{r.Waiver.Who, r.Waiver.Why, r.Waiver.Until}
	}
	return v
}

func channelViews(cfg *pipeline.Config) []channelJSON {
	out := make([]channelJSON, len(cfg.Compute.Channels))
	for i := range out {
		c := &cfg.Compute.Channels[i]
		out[i] = channelJSON{
			ID: c.ID, Title: c.Title, Unit: c.Unit.Name, Dimension: c.Unit.Dimension.String(), Reference: referenceName(c.Reference),
			Low: c.Low, High: c.High, RecordedOnly: c.RecordedOnly, Station: station(&cfg.Compute.Stations, i), Swaps: []sensorJSON{},
		}
		if c.Record.Serial != "" {
			v := sensorView(&c.Record, 0)
			out[i].Sensor = &v
		}
		for k := range c.Swaps {
			out[i].Swaps = append(out[i].Swaps, sensorView(&c.Swaps[k].Record, c.Swaps[k].From))
		}
	}
	return out
}

func referenceName(r calib.Reference) string {
	switch r {
	case calib.Absolute:
		return "absolute"
	case calib.Gauge:
		return "gauge"
	case calib.Differential:
		return "differential"
	case calib.ReferenceNone:
	}
	return ""
}

// quantityJSON is what hello says of a quantity.
type quantityJSON struct {
	Name  string `json:"name"`
	Unit  string `json:"unit"`
	Title string `json:"title"`
}

func quantityViews() []quantityJSON {
	out := make([]quantityJSON, monitor.NumQuantities)
	for q := range monitor.NumQuantities {
		out[q] = quantityJSON(q.Info())
	}
	return out
}

// coolDownJSON is what is asked for before the next start; 0 = nothing.
type coolDownJSON struct {
	AtLeast       float64 `json:"at_least_s"`       // since the fuel is off
	BeforeRestart float64 `json:"before_restart_s"` // since the rotor rests
}

// place is where among outcomes and scans a hello stands.
type place struct {
	n uint64 // of the outcome before
	t int64  // event time of the scan before, ns UTC; 0 = none
}

// newestScan is the place after all that was stepped.
func newestScan(m *pipeline.Machine, s *pipeline.State) place {
	cfg, _ := m.Config()
	return place{s.N, max(s.Align.Next-cfg.Align.Period, 0)}
}

// appendHello writes the frame that opens a connection or a stretch of stored
// frames: all that a display needs before the frames after at make sense.
func appendHello(dst []byte, m *pipeline.Machine, s *pipeline.State, at place, build string) []byte {
	cfg, _ := m.Config()
	status := m.Status(s)
	dst = open(dst, "hello", &pipeline.Outcome{Epoch: s.Epoch, N: at.n, T: at.t})
	dst = count(dst, "api", apiVersion)
	dst = instant(dst, "host_time", s.Host)
	dst = number(dst, "scan_rate", 1e9/float64(max(cfg.Align.Period, 1)))
	dst = text(dst, "config_hash", cfg.Hash)
	dst = member(dst, "config", s.InForce)
	dst = text(dst, "build", build)
	if s.RunActive {
		dst = member(dst, "run", runView(&s.Run))
	} else {
		dst = append(name(dst, "run"), "null"...)
	}
	dst = member(dst, "rig", cfg.Rig)
	dst = member(dst, "channels", channelViews(&cfg))
	dst = member(dst, "quantities", quantityViews())
	armed := math.NaN()
	if a := cfg.Compute.Nozzle.ArmedAboveRPM; a > 0 {
		armed = a
	}
	dst = number(dst, "choke_armed_above_rpm", armed)
	ledger := m.Ledger(s)
	dst = list(dst, "bands", len(ledger), func(dst []byte, i int) []byte { return append(appendBand(dst, &ledger[i]), '}') })
	dst = member(dst, "alarms", append([]rules.Alarm{}, m.Alarms(s)...))
	dst = appendBands(dst, "ledgers", ledger)
	if life, ok := s.Life(cfg.Rig.EngineSerial); ok {
		dst = member(dst, "life", life)
	} else {
		dst = append(name(dst, "life"), "null"...)
	}
	if life, ok := s.NozzleLife(cfg.Rig.NozzleSerial); ok {
		dst = member(dst, "nozzle_life", life)
	} else {
		dst = append(name(dst, "nozzle_life"), "null"...)
	}
	l := &cfg.Compute.EGT.Limits
	dst = member(dst, "cooldown", coolDownJSON{seconds(l.CoolFuelOff), seconds(l.CoolRest)})
	dst = member(dst, "log", append([]pipeline.Entry{}, s.Log...))
	dst = member(dst, "checks", m.Checks(s))
	dst = member(dst, "card", cardView(&s.Card))
	dst = open(name(dst, "status"), "status", &pipeline.Outcome{Epoch: s.Epoch, N: at.n, T: s.Host})
	return append(appendStatus(dst, &status), '}', '}')
}

// station names the station that a channel serves, "" when it serves none.
func station(st *compute.Stations, i int) string {
	switch {
	case slices.Contains(st.P7, i):
		return "p7"
	case slices.Contains(st.T7, i):
		return "t7"
	case slices.Contains(st.EGT, i):
		return "egt"
	case slices.Contains(st.WallStatic, i):
		return "wall_static"
	case slices.Contains(st.Reheat, i):
		return "reheat"
	case slices.Contains(st.ThroatArea, i):
		return "throat_area"
	case st.DewPoint && st.Humidity == i:
		return "dew_point"
	}
	for _, s := range []struct {
		name  string
		index int
	}{
		{"barometer", st.Barometer},
		{"exit_plane", st.ExitPlane},
		{"inlet_temperature", st.InletT},
		{"inlet_pressure", st.InletP},
		{"humidity", st.Humidity},
		{"ambient_temperature", st.AmbientT},
		{"speed", st.Speed},
		{"fuel_flow", st.FuelFlow},
		{"bellmouth", st.Bellmouth},
		{"water_flow", st.WaterFlow},
		{"bleed_flow", st.BleedFlow},
		{"bleed_temperature", st.BleedT},
		{"thrust", st.Thrust},
	} {
		if s.index == i {
			return s.name
		}
	}
	return ""
}
