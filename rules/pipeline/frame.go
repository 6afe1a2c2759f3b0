package pipeline

import (
	"math"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/monitor/egt"
	"throatwatch/rules"
)

// frame fills the values that rules read. Each name of the environment is
// resolved once, to a place of the operating point, the scan, the ledger or the
// state; nothing is looked up by name later.
type frame struct {
	rules.Frame
	scan   []fill // filled from each scan
	health []fill // filled from the state of the daemon
	bands  []egt.Band
	egt    []int
	rake   []int
	titles []string // of channels
	dated  []dated  // those that station values need and whose calibration can expire
	hot    []bool   // by channel: an EGT probe, of which what reads hot is told apart
}

// fill writes slot from source; index tells which quantity, channel or band.
type fill struct {
	slot   int
	source source
	index  int
}

type source uint8

const (
	fromQuantity source = iota
	fromChokeState
	fromPhase
	fromBackPressure
	fromTotalPressure
	fromTemperature
	fromSteady
	fromArmed
	fromArmedBy
	fromMarginal
	fromLit
	fromRunActive
	fromChannel
	fromQuality
	fromUsable
	fromOver
	fromExceeded
	fromElapsed
	fromRemaining
	fromEGTUsed
	fromRakeUsed
	fromEGTLost
	fromRakeLost
	fromFailed
	fromFailedSensor
	fromFailedFinding
	fromDoubtful
	fromDoubtfulSensor
	fromDoubtfulFinding
	fromHot
	fromHotProbe
	fromHotBy
	fromFinding
	fromExpired
	fromExpiredSensor
	fromRecording
	fromInputPath
	fromClock
	fromWebhook
	fromDatabase
	fromWebhookWaiting
	fromDatabaseLag
	fromDisk
	fromDiskFree
	fromSources
	fromSourcesLost
	fromDataAge
	fromSkew
)

var plainSources = map[string]source{
	"choke_state": fromChokeState, "phase": fromPhase, "back_pressure_from": fromBackPressure,
	"total_pressure_from": fromTotalPressure, "total_temperature_from": fromTemperature, "steady": fromSteady,
	"choke_armed": fromArmed, "choke_armed_by": fromArmedBy, "choke_marginal": fromMarginal, "lit": fromLit, "run_active": fromRunActive,
	"egt_probes_used": fromEGTUsed, "rake_probes_used": fromRakeUsed,
	"egt_probes_lost": fromEGTLost, "rake_probes_lost": fromRakeLost,
	"sensors_failed": fromFailed, "failed_sensor": fromFailedSensor, "failed_finding": fromFailedFinding,
	"sensors_doubtful": fromDoubtful, "doubtful_sensor": fromDoubtfulSensor, "doubtful_finding": fromDoubtfulFinding,
	"egt_hot_probes": fromHot, "egt_hot_probe": fromHotProbe, "egt_hot_by_k": fromHotBy,
	"calibrations_expired": fromExpired, "expired_sensor": fromExpiredSensor,
	"health.recording": fromRecording, "health.input_path": fromInputPath, "health.clock": fromClock,
	"health.webhook": fromWebhook, "health.database": fromDatabase, "webhook_waiting": fromWebhookWaiting, "database_lag_s": fromDatabaseLag,
	"health.disk": fromDisk, "disk_free_gb": fromDiskFree,
	"health.sources": fromSources, "sources_lost": fromSourcesLost, "data_age_s": fromDataAge, "clock_skew_s": fromSkew,
}

var bandSources = map[string]source{
	"over": fromOver, "exceeded": fromExceeded, "elapsed_s": fromElapsed, "remaining_s": fromRemaining,
}

// barometers are the station pressures between which a rig lies, Pa: 4 km high
// [ISO 2533 table 1], and the highest ever at sea level (from memory).
const (
	leastBarometer   = 60e3
	highestBarometer = 108.5e3
)

// Names gives the environment of a rig's rules. Rules see a gauge pressure made
// absolute, so its range is that of the channel above the barometer.
func Names(cfg *Config) []rules.Name {
	channels := make([]rules.Channel, len(cfg.Compute.Channels))
	for i := range channels {
		c := &cfg.Compute.Channels[i]
		channels[i] = rules.Channel{ID: c.ID, Dimension: c.Unit.Dimension, Low: c.Low, High: c.High}
		if c.Reference == calib.Gauge {
			channels[i].Low, channels[i].High = max(0, c.Low+leastBarometer), c.High+highestBarometer
		}
	}
	bands := make([]string, len(cfg.Compute.EGT.Bands))
	for i := range bands {
		bands[i] = cfg.Compute.EGT.Bands[i].Name
	}
	return rules.StandardNames(channels, bands)
}

// newFrame makes a frame for all names, of which it fills the standard ones, names;
// the derived ones behind them are filled by the rules.
func newFrame(cfg *Config, names, all []rules.Name) frame {
	f := frame{Frame: rules.NewFrame(all), egt: cfg.Compute.Stations.EGT, rake: cfg.Compute.Stations.P7, bands: cfg.Compute.EGT.Bands}
	for i := range cfg.Compute.Channels {
		ch := &cfg.Compute.Channels[i]
		title := ch.Title
		if title == "" {
			title = ch.ID
		}
		f.titles, f.hot = append(f.titles, title), append(f.hot, slices.Contains(f.egt, i))
	}
	for _, i := range cfg.OnFile() {
		if cfg.Compute.InUse(i) {
			f.dated = append(f.dated, dated{i, &cfg.Compute.Channels[i]})
		}
	}
	channel := map[string]int{}
	for i := range cfg.Compute.Channels {
		channel[cfg.Compute.Channels[i].ID] = i
	}
	band := map[string]int{}
	for i := range cfg.Compute.EGT.Bands {
		band[cfg.Compute.EGT.Bands[i].Name] = i
	}
	for slot, n := range names {
		item := fill{slot: slot}
		if q, ok := monitor.ParseQuantity(n.Name); ok {
			item.source, item.index = fromQuantity, int(q)
			f.scan = append(f.scan, item)
			continue
		}
		if src, ok := plainSources[n.Name]; ok {
			item.source = src
			if src >= fromRecording || src == fromRunActive {
				f.health = append(f.health, item)
			} else {
				f.scan = append(f.scan, item)
			}
			continue
		}
		head, rest, _ := strings.Cut(n.Name, ".")
		switch head {
		case "channel":
			item.source, item.index = fromChannel, channel[rest]
		case "finding":
			item.source, item.index = fromFinding, channel[rest]
		case "quality":
			item.source, item.index = fromQuality, channel[rest]
		case "usable":
			item.source, item.index = fromUsable, channel[rest]
		case "egt":
			name, field, _ := strings.Cut(rest, ".")
			src, ok := bandSources[field]
			if !ok {
				panic("pipeline: nothing fills the name " + n.Name)
			}
			item.source, item.index = src, band[name]
		default:
			panic("pipeline: nothing fills the name " + n.Name)
		}
		f.scan = append(f.scan, item)
	}
	return f
}

// fill sets every name from a scan, its operating point and the state.
func (f *frame) fill(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) {
	f.fillHealth(s)
	found := f.findings(scan)
	for _, it := range f.scan {
		switch it.source {
		case fromQuantity:
			f.Numbers[it.slot] = p.V[it.index]
		case fromChannel:
			f.Numbers[it.slot] = scan.Value[it.index]
		case fromQuality:
			f.Texts[it.slot] = scan.Quality[it.index].String()
		case fromUsable:
			f.Bools[it.slot] = rules.TriOf(scan.Quality[it.index].Usable())
		case fromChokeState:
			f.Texts[it.slot] = known(p.Choke != monitor.ChokeUnknown, p.Choke.String())
		case fromPhase:
			f.Texts[it.slot] = known(p.Phase != monitor.PhaseUnknown, p.Phase.String())
		case fromBackPressure:
			f.Texts[it.slot] = p.BackFrom.String()
		case fromTotalPressure:
			f.Texts[it.slot] = p.PressureBy.String()
		case fromTemperature:
			f.Texts[it.slot] = p.TemperatureBy.String()
		case fromSteady:
			f.Bools[it.slot] = rules.TriOf(p.Steady)
		case fromArmed:
			f.Bools[it.slot] = rules.TriOf(p.ChokeArmed)
		case fromArmedBy:
			f.Texts[it.slot] = p.ArmedBy.String()
		case fromMarginal:
			f.Bools[it.slot] = rules.TriOf(p.ChokeMarginal)
		case fromLit:
			f.Bools[it.slot] = rules.Unknown
			if p.LitKnown {
				f.Bools[it.slot] = rules.TriOf(p.Lit)
			}
		case fromOver:
			f.Bools[it.slot] = rules.TriOf(s.Compute.EGT.Bands[it.index].Over)
		case fromExceeded:
			f.Bools[it.slot] = rules.TriOf(s.Compute.EGT.Bands[it.index].Exceeded)
		case fromElapsed:
			f.Numbers[it.slot] = float64(s.Compute.EGT.Bands[it.index].Elapsed) / 1e9
		case fromRemaining:
			f.Numbers[it.slot] = float64(s.Compute.EGT.Bands[it.index].Remaining(&f.bands[it.index])) / 1e9
		case fromEGTUsed:
			f.Numbers[it.slot] = float64(p.EGTProbesUsed)
		case fromRakeUsed:
			f.Numbers[it.slot] = float64(p.RakeProbesUsed)
		case fromEGTLost:
			f.Numbers[it.slot] = float64(len(f.egt) - int(p.EGTProbesUsed))
		case fromRakeLost:
			f.Numbers[it.slot] = float64(len(f.rake) - int(p.RakeProbesUsed))
		case fromFailed:
			f.Numbers[it.slot] = float64(found.failed.n)
		case fromFailedSensor:
			f.Texts[it.slot] = f.sensor(&found.failed)
		case fromFailedFinding:
			f.Texts[it.slot] = found.failed.kind(scan)
		case fromDoubtful:
			f.Numbers[it.slot] = float64(found.doubtful.n)
		case fromDoubtfulSensor:
			f.Texts[it.slot] = f.sensor(&found.doubtful)
		case fromDoubtfulFinding:
			f.Texts[it.slot] = found.doubtful.kind(scan)
		case fromHot:
			f.Numbers[it.slot] = float64(found.hot.n)
		case fromHotProbe:
			f.Texts[it.slot] = f.sensor(&found.hot)
		case fromHotBy:
			f.Numbers[it.slot] = 0
			if found.hot.n > 0 {
				f.Numbers[it.slot] = scan.Finding[found.hot.first].Size
			}
		case fromExpired:
			f.Numbers[it.slot] = float64(f.expired(p.T).n)
		case fromExpiredSensor:
			expired := f.expired(p.T)
			f.Texts[it.slot] = f.sensor(&expired)
		case fromFinding:
			f.Texts[it.slot] = none(scan.Finding[it.index].Kind.String())
		case fromRunActive, fromRecording, fromInputPath, fromClock, fromSources, fromSourcesLost, fromDataAge, fromSkew,
			fromWebhook, fromDatabase, fromWebhookWaiting, fromDatabaseLag, fromDisk, fromDiskFree:
		}
	}
}

// found counts findings; first is the channel of the first of them.
type found struct{ n, first int }

// findings sorts what was found of sensors in a scan: what is proven, what is suspected,
// and of the suspected the EGT probes that read hot, which may be the gas.
func (f *frame) findings(scan *monitor.Scan) (out struct{ failed, doubtful, hot found }) {
	for i := range scan.Finding {
		is := &scan.Finding[i]
		of := &out.doubtful
		switch {
		case is.Kind == monitor.NoFinding:
			continue
		case is.Proven:
			of = &out.failed
		case f.hot[i] && is.Size > 0:
			of = &out.hot
		}
		if of.n == 0 {
			of.first = i
		}
		of.n++
	}
	return out
}

// dated is a channel whose calibration can expire.
type dated struct {
	index   int
	channel *compute.Channel
}

// expired counts the sensors whose calibration has expired at t and that nobody waived.
func (f *frame) expired(t int64) (out found) {
	for _, d := range f.dated {
		if d.channel.RecordAt(t).State(t) != calib.Expired {
			continue
		}
		if out.n == 0 {
			out.first = d.index
		}
		out.n++
	}
	return out
}

// sensor names the first channel, "none" when there is none.
func (f *frame) sensor(of *found) string {
	if of.n == 0 {
		return "none"
	}
	return f.titles[of.first]
}

// kind gives the finding of the first channel, "none" when there is none.
func (of *found) kind(scan *monitor.Scan) string {
	if of.n == 0 {
		return "none"
	}
	return scan.Finding[of.first].Kind.String()
}

func none(code string) string {
	if code == "" {
		return "none"
	}
	return code
}

// fillHealth sets the names that say how the daemon itself does.
func (f *frame) fillHealth(s *State) {
	lost, skew := 0, int64(0)
	for i := range s.Align.Sources {
		src := &s.Align.Sources[i]
		age := s.Host - src.Host
		if s.silence(src) > silent && age <= forgotten {
			lost++
		}
		if src.Skewed && age <= silent {
			skew = src.Skew
		}
	}
	for _, it := range f.health {
		switch it.source {
		case fromRunActive:
			f.Bools[it.slot] = rules.TriOf(s.RunActive)
		case fromRecording:
			f.Bools[it.slot] = rules.TriOf(s.Health.NotRecordingSince == 0)
		case fromInputPath:
			f.Bools[it.slot] = rules.TriOf(!s.Health.InputPathDeaf)
		case fromClock:
			f.Bools[it.slot] = rules.TriOf(skew == 0)
		case fromWebhook:
			f.Bools[it.slot] = rules.TriOf(s.Health.Webhook.Since == 0)
		case fromDatabase:
			f.Bools[it.slot] = rules.TriOf(s.Health.Database.Since == 0)
		case fromWebhookWaiting:
			f.Numbers[it.slot] = s.Health.Webhook.behind()
		case fromDatabaseLag:
			f.Numbers[it.slot] = s.Health.Database.behind()
		case fromDisk:
			f.Bools[it.slot] = rules.TriOf(s.Health.Disk.Since == 0)
		case fromDiskFree:
			f.Numbers[it.slot] = s.Health.Disk.behind()
		case fromSources:
			f.Bools[it.slot] = rules.TriOf(lost == 0)
		case fromSourcesLost:
			f.Numbers[it.slot] = float64(lost)
		case fromSkew:
			f.Numbers[it.slot] = float64(skew) / 1e9
		case fromDataAge:
			f.Numbers[it.slot] = math.NaN()
			if s.Align.MaxEvent != 0 {
				f.Numbers[it.slot] = float64(max(s.Host-s.Align.MaxEvent, 0)) / 1e9
			}
		case fromQuantity, fromChokeState, fromPhase, fromBackPressure, fromTotalPressure, fromTemperature, fromSteady,
			fromArmed, fromArmedBy, fromMarginal, fromLit, fromChannel, fromQuality, fromUsable, fromOver, fromExceeded, fromElapsed, fromRemaining, fromEGTUsed, fromRakeUsed,
			fromEGTLost, fromRakeLost, fromFailed, fromFailedSensor, fromFailedFinding, fromDoubtful, fromDoubtfulSensor, fromDoubtfulFinding,
			fromHot, fromHotProbe, fromHotBy, fromFinding, fromExpired, fromExpiredSensor:
		}
	}
}

func known(ok bool, text string) string {
	if ok {
		return text
	}
	return ""
}
