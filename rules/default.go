package rules

import (
	"fmt"
	"strconv"
	"strings"
	"time"

	"throatwatch/monitor/egt"
)

// Equipment says what of a rig the default rules can build on.
type Equipment struct {
	Bands     []egt.Band
	Limits    egt.Limits
	EGT       bool // an EGT harness
	Rake      bool // total-pressure probes at the nozzle entry
	Speed     bool // rotor speed, without which the phase is unknown
	FuelFlow  bool
	Bellmouth bool
	OnFile    bool // due dates of calibrations
}

// AllEquipment is that of a rig which has every default rule.
func AllEquipment() Equipment {
	return Equipment{
		Bands:  []egt.Band{{Name: "start", Kind: egt.KindStart, Allowance: second}, {Name: "run", Kind: egt.KindRun, Allowance: second}},
		Limits: egt.Limits{Spread: 1, Rise: 1, StarterOnce: second, StarterHour: second, StarterRuns: 1, Rundown: second, CoolFuelOff: second},
		EGT:    true, Rake: true, Speed: true, FuelFlow: true, Bellmouth: true, OnFile: true,
	}
}

// Groups of the default rules: one cause, one first alarm.
const (
	groupEGT      = "egt"     // over-temperature
	groupSources  = "sources" // what a lost publisher takes along
	groupNozzle   = "nozzle"
	groupFlame    = "flame"
	groupDelivery = "delivery" // what takes alarms and values to others
)

// egtWorse is how much hotter an acknowledged over-temperature has to become to ask
// again, K: about the uncertainty of a thermocouple, no source.
const egtWorse = 10

const (
	notProtection = " This display is not protection."
	ms            = int64(time.Millisecond)
	second        = int64(time.Second)
)

// flowBalance holds the balance against the engine's own baseline by its 95 % uncertainty.
// Until a baseline is learned or where an uncertainty is not stated, 3 % of the flow is what
// sound meters of a small rig keep (common practice, no source).
const flowBalance = `phase == "steady" and (` +
	`known(flow_balance_baseline_kg_s) and known(flow_balance_kg_s_u95) and ` +
	`abs(flow_balance_kg_s - flow_balance_baseline_kg_s) > flow_balance_kg_s_u95 or ` +
	`not (known(flow_balance_baseline_kg_s) and known(flow_balance_kg_s_u95)) and abs(flow_balance_kg_s) > 0.03 * mass_flow_kg_s)`

// Default gives the rules for a rig whose author wrote none. Times and limits
// other than those of the EGT bands are those of a small gas turbine; a rule file
// replaces them.
//
// A start band that is exceeded is a hot start. A flame-out is told above idle
// only: at idle it shows as a shutdown does. Cautions about the flame build on
// the indicated EGT and rotor speed.
func Default(q Equipment) []Rule {
	var r []Rule
	for i := range q.Bands {
		r = append(r, bandRules(&q.Bands[i])...)
	}
	if q.EGT {
		r = append(r, egtRules()...)
		if q.Speed {
			r = append(r, flameRules(q.FuelFlow)...)
		}
	}
	r = append(r, limitRules(&q)...)
	r = append(r, sensorRules(&q)...)
	r = append(r, Rule{
		Name: "unchoke", When: `choke_armed and choke_state != "choked"`, Priority: Caution,
		OnDelay: 300 * ms, OffDelay: second, Group: groupNozzle, Value: "choke_margin_percent", Downward: true,
		Title:    "Throat unchoked",
		Text:     "Throat not choked while choke is expected by the {choke_armed_by}: margin {choke_margin_percent:%.1}, NPR {npr:.3} against {choke_npr:.3}. Follow the facility's test-point procedure." + notProtection,
		Caution:  "Flow and thrust now depend on the back pressure; values taken at this point are not those of a choked nozzle. Watch cell depression, rake pressures and indicated EGT.",
		Response: "Facility procedure for a lost test point.",
	}, Rule{
		Name: "choke_unknown", When: "choke_armed and not known(choke_state)", Priority: Caution,
		OnDelay: 3 * second, OffDelay: second, Group: groupSources,
		Title:    "Choke state unknown",
		Text:     "The choke state is not known while choke is expected: an unchoke would not be seen here. Follow the facility's procedure for lost instrumentation." + notProtection,
		Caution:  "A pressure or temperature that the state needs has no usable value. The Watch page names it.",
		Response: "Facility procedure for lost instrumentation.",
	}, Rule{
		Name: "choke_marginal", When: "choke_armed and choke_marginal", Priority: Note,
		OnDelay: second, OffDelay: 2 * second, Group: groupNozzle,
		Title:    "Choke marginal",
		Text:     "Choke margin {choke_margin_percent:%.1} is within its uncertainty.",
		Caution:  "The measurement cannot tell choked from unchoked here.",
		Response: "Facility procedure for steady test points.",
	})
	if q.Rake {
		r = append(r, probesLost("rake", "rake probe", "The mean pressure of the rake rests on fewer probes: margin, flow and thrust are less certain."))
	}
	if q.Bellmouth && q.FuelFlow {
		r = append(r, Rule{
			Name: "flow_balance", When: flowBalance, Priority: Note,
			OnDelay: 3 * second, OffDelay: 3 * second, Group: groupNozzle,
			Title:    "Flow balance off",
			Text:     "The metered flow less nozzle flow is {flow_balance_kg_s:kg/s.3} ± {flow_balance_kg_s_u95:kg/s.3} of {mass_flow_kg_s:kg/s.3}; this engine's own baseline is {flow_balance_baseline_kg_s:kg/s.3}.",
			Caution:  "Bellmouth, fuel meter, rake or throat area disagree more than their uncertainty: one of them is not what it seems.",
			Response: "Facility procedure for instrumentation checks.",
		})
	}
	return append(r, daemonRules()...)
}

// bandRules gives the warning of an EGT band and, if it allows a time, the
// caution that the time is running.
func bandRules(b *egt.Band) []Rule {
	name := "egt." + b.Name
	limit := strconv.FormatFloat(b.Limit-273.15, 'f', 0, 64) + " °C"
	what, response := "Indicated EGT", "Facility procedure for over-temperature."
	if b.Kind == egt.KindStart {
		what, response = "Indicated EGT in the start", "Facility procedure for a hot start."
	}
	warning := Rule{
		Name: "egt_" + b.Name + "_exceeded", When: name + ".exceeded", Priority: Warning, Latching: true, Group: groupEGT,
		Value: "egt_indicated_k", WorsenBy: egtWorse,
		Title:    what + " beyond " + limit,
		Text:     what + " {egt_indicated_k:degC.1}, above " + limit + ", where no time is allowed. " + response[:len(response)-1] + " applies." + notProtection,
		Caution:  "Hot parts may be damaged. Watch indicated EGT, its spread, rotor speed and vibration. The event is to be entered in the engine's log.",
		Response: response,
	}
	if b.Kind == egt.KindStart {
		warning.Title = "Hot start: " + what[:len("Indicated EGT")] + " beyond " + limit
	}
	if b.Allowance == 0 {
		return []Rule{warning}
	}
	allowance := seconds(b.Allowance)
	perRun := ""
	if b.PerRun > 0 {
		perRun = ", limit of the run " + seconds(b.PerRun)
	}
	warning.Text = what + " above " + limit + " for {" + name + ".elapsed_s:s.1} (limit " + allowance + perRun + "). " +
		response[:len(response)-1] + " applies." + notProtection
	return []Rule{warning, {
		Name: "egt_" + b.Name + "_over", When: name + ".over", Priority: Caution, Group: groupEGT,
		Value: "egt_indicated_k", WorsenBy: egtWorse,
		Title:    what + " above " + limit,
		Text:     what + " above " + limit + ", where " + allowance + " are allowed" + perRun + ". Follow the facility's procedure." + notProtection,
		Caution:  "The time allowance of this limit is running. Watch indicated EGT and its trend.",
		Response: response,
	}}
}

// seconds writes a time in ns for people.
func seconds(ns int64) string {
	return number(float64(ns)/1e9) + " s"
}

// number writes a number as expressions take it.
func number(v float64) string { return strconv.FormatFloat(v, 'f', -1, 64) }

// egtRules gives what needs an EGT harness.
func egtRules() []Rule {
	return []Rule{
		{
			Name: "egt_lost", When: "lit and not known(egt_indicated_k)", Priority: Warning, OnDelay: 500 * ms, OffDelay: second,
			Title:    "All EGT lost while lit",
			Text:     "No usable indicated EGT while the engine is lit: EGT limits are not watched. Follow the facility's procedure for lost EGT indication." + notProtection,
			Caution:  "An over-temperature would not be seen here. Time above a limit is counted on as assumed if the last value was above it.",
			Response: "Facility procedure for lost EGT indication.",
		},
		probesLost("egt", "EGT probe", "The mean and the spread rest on fewer probes; a hot streak at a lost probe is not seen."),
	}
}

// flameRules gives what needs an EGT harness and rotor speed.
func flameRules(fuelFlow bool) []Rule {
	out := []Rule{
		{
			Name: "hung_start", When: `phase == "lighting" and speed_rate_rpm_s < ` + number(egt.HungRate), Priority: Caution, OnDelay: egt.HungFor, OffDelay: second, Deadband: 20, Group: groupFlame,
			Title:    "Hung start",
			Text:     "Lit, but rotor speed has hung below idle at {speed_rpm:.0} for " + seconds(egt.HungFor) + "; indicated EGT {egt_indicated_k:degC.0}. Follow the facility's procedure for a hung start." + notProtection,
			Caution:  "EGT can climb fast at low air flow. Watch indicated EGT against the start limit.",
			Response: "Facility procedure for a hung start.",
		},
		{
			Name: "flame_out", When: `(phase == "accelerating" or phase == "steady" or phase == "decelerating") and not lit`, Priority: Caution,
			OnDelay: egt.FlameOutFor, OffDelay: second, Group: groupFlame, Unknown: Doubt{Priority: Advisory, After: 5 * second},
			Title:    "Flame-out",
			Text:     "Indicated EGT has fallen to {egt_indicated_k:degC.0} at {speed_rpm:.0}: the flame seems to be out. Follow the facility's procedure for a flame-out." + notProtection,
			Caution:  "Unburnt fuel may gather in the exhaust. Watch fuel flow, rotor speed and indicated EGT.",
			Response: "Facility procedure for a flame-out.",
		},
	}
	if fuelFlow {
		out = append(out, Rule{
			Name: "no_light", When: `phase == "cranking" and fuel_flow_kg_s > ` + number(egt.FuelOn), Priority: Caution, OnDelay: egt.NoLightFor, OffDelay: second, Group: groupFlame,
			Title:    "No light-off",
			Text:     "Fuel flow of {fuel_flow_kg_s:kg/h.0} for " + seconds(egt.NoLightFor) + " of cranking without a flame. Follow the facility's procedure for a start without light-off." + notProtection,
			Caution:  "Unburnt fuel may gather in the exhaust and light late. Watch indicated EGT and fuel flow.",
			Response: "Facility procedure for a start without light-off.",
		})
	}
	return out
}

// limitRules gives what the rig file states limits for beside the bands.
//
// Of EGT that rises after a shutdown a warning is made: nobody waits for anything then,
// and a fire in the engine asks for a response at once. Heat that soaks back from the
// casing raises EGT too, which the limit must be above.
func limitRules(q *Equipment) []Rule {
	l := &q.Limits
	var out []Rule
	add := func(is bool, r Rule) {
		if is {
			out = append(out, r)
		}
	}
	add(q.EGT && q.Speed && l.Rise > 0, Rule{
		Name: "egt_rise", When: "egt_rise_k > " + number(l.Rise), Priority: Warning, OnDelay: second, OffDelay: 5 * second, Deadband: 10, Latching: true, Group: groupFlame,
		WorsenBy: 2 * egtWorse,
		Title:    "EGT rising after shutdown",
		Text:     "Indicated EGT {egt_indicated_k:degC.0}, {egt_rise_k:.0} above its lowest since the fuel is off (limit " + number(l.Rise) + " K). Facility procedure for an internal fire applies." + notProtection,
		Caution:  "Fuel may be burning in the engine or the exhaust. Heat that soaks back raises EGT too, but less and more slowly. Watch indicated EGT, fuel flow and the exhaust.",
		Response: "Facility procedure for an internal fire.",
	})
	add(q.EGT && l.Spread > 0, Rule{
		Name: "egt_spread", When: "egt_spread_k > " + number(l.Spread), Priority: Caution, OnDelay: 3 * second, OffDelay: 3 * second, Deadband: 5, Group: groupEGT,
		WorsenBy: egtWorse,
		Title:    "EGT spread beyond " + number(l.Spread) + " K",
		Text:     "Hottest probe {egt_hottest_k:degC.0}, coldest {egt_coldest_k:degC.0}: spread {egt_spread_k:.0} (limit " + number(l.Spread) + " K). Follow the facility's procedure for EGT spread." + notProtection,
		Caution:  "A burner or nozzle may be blocked or streaking; the mean does not show how hot the hottest part is. Watch the hottest probe and its neighbours.",
		Response: "Facility procedure for EGT spread.",
	})
	starter := func(name, quantity, span string, limit int64) {
		add(q.Speed && limit > 0, Rule{
			Name: name, When: quantity + " > " + number(float64(limit)/1e9), Priority: Caution, OffDelay: second,
			Title:    "Starter duty beyond " + seconds(limit) + " " + span,
			Text:     "Cranked for {" + quantity + ":.0} " + span + " (limit " + seconds(limit) + "). Follow the facility's procedure for starter duty.",
			Caution:  "The starter heats up and needs its time to cool. Cranking counts until idle is reached, since where the starter cuts out is not measured.",
			Response: "Facility procedure for starter duty.",
		})
	}
	starter("starter_once", "starter_s", "in one go", l.StarterOnce)
	starter("starter_hour", "starter_hour_s", "in an hour", l.StarterHour)
	add(q.Speed && l.StarterRuns > 0, Rule{
		Name: "starter_starts", When: fmt.Sprintf("starter_starts_hour > %d", l.StarterRuns), Priority: Advisory,
		Title:    fmt.Sprintf("More than %d starts in an hour", l.StarterRuns),
		Text:     fmt.Sprintf("The starter was engaged {starter_starts_hour:.0} times within an hour (limit %d). Follow the facility's procedure for starter duty.", l.StarterRuns),
		Caution:  "The starter and its supply heat up with each engagement and need their time to cool, however short it was.",
		Response: "Facility procedure for starter duty.",
	})
	early := `phase == "lighting"`
	if q.FuelFlow {
		early = `(phase == "lighting" or phase == "cranking" and fuel_flow_kg_s > ` + number(egt.FuelOn) + ")"
	}
	add(q.Speed && (l.CoolFuelOff > 0 || l.CoolRest > 0), Rule{
		Name: "start_before_cooldown", When: early + " and cooldown_left_s > 0", Priority: Note, OffDelay: second,
		Title:    "Start before the cool-down is over",
		Text:     "A start has begun with {cooldown_left_s:.0} of the cool-down left. Follow the facility's procedure for cool-down times.",
		Caution:  "Shaft and casing may still have different temperatures: the rotor may be bowed and rub. Watch vibration and the speed at which the start accelerates.",
		Response: "Facility procedure for cool-down times.",
	})
	add(q.Speed && l.Rundown > 0, Rule{
		Name: "rundown_short", When: `phase == "cooling" and rundown_s < ` + number(float64(l.Rundown)/1e9), Priority: Advisory,
		Title:    "Rundown shorter than " + seconds(l.Rundown),
		Text:     "The rotor ran down in {rundown_s:.1} (limit " + seconds(l.Rundown) + "). Follow the facility's procedure for rundown times.",
		Caution:  "A bearing, a seal or blade tips may rub. Watch vibration, oil and bearing temperatures at the next start.",
		Response: "Facility procedure for rundown times.",
	})
	return out
}

// sensorRules gives what is said of sensors: one alarm for all that is proven and one for
// what is suspected, each with the first sensor and how many there are. An EGT probe that
// reads hot without proof may tell of the gas: that is an alarm on EGT.
func sensorRules(q *Equipment) []Rule {
	out := []Rule{
		{
			Name: "sensor_failed", When: "sensors_failed > 0", Priority: Advisory, OffDelay: 5 * second, Group: groupSources,
			WorsenBy: 1,
			Title:    "Sensor failed",
			Text:     "{failed_sensor}: {failed_finding}, proven. {sensors_failed:.0} sensor(s) in all; the Rig page names them. Follow the facility's procedure for lost instrumentation.",
			Caution:  "A probe of a rake or harness is left out where its reading is wrong; any other value of this sensor is not to be relied on.",
			Response: "Facility procedure for lost instrumentation.",
		},
		{
			Name: "sensor_doubtful", When: "sensors_doubtful > 0", Priority: Advisory, OffDelay: 5 * second, Group: groupSources,
			WorsenBy: 1,
			Title:    "Sensor doubtful",
			Text:     "{doubtful_sensor}: {doubtful_finding}, suspected, not proven. {sensors_doubtful:.0} sensor(s) in all; the Rig page names them. Follow the facility's procedure for instrumentation checks.",
			Caution:  "What this sensor reads may be real. Watch its mates.",
			Response: "Facility procedure for instrumentation checks.",
		},
	}
	if q.OnFile {
		out = append(out, Rule{
			Name: "calibration_expired", When: "calibrations_expired > 0", Priority: Advisory, OnDelay: second, OffDelay: 5 * second,
			WorsenBy: 1,
			Title:    "Calibration expired",
			Text:     "{expired_sensor}: its calibration has expired, and nobody has waived it. {calibrations_expired:.0} sensor(s) of station values in all; the Rig page names them. Follow the facility's procedure for instrumentation checks.",
			Caution:  "What is computed from this sensor rests on a calibration that is out of date. A waiver in the rig file names who answers for it.",
			Response: "Facility procedure for instrumentation checks.",
		})
	}
	if q.EGT {
		out = append(out, Rule{
			Name: "egt_hot_streak", When: "egt_hot_probes > 0", Priority: Caution, OffDelay: 3 * second, Group: groupEGT,
			WorsenBy: 1,
			Title:    "EGT probe reads hot",
			Text:     "{egt_hot_probe} reads {egt_hot_by_k:.0} above its own pattern without proof of failure: a hot streak must be assumed. {egt_hot_probes:.0} probe(s) in all. Follow the facility's procedure for EGT spread." + notProtection,
			Caution:  "A part of the gas may be hotter than the indicated EGT shows. The probe stays in the mean. Watch the hottest probe, its neighbours and the spread.",
			Response: "Facility procedure for EGT spread.",
		})
	}
	return out
}

// probesLost gives the advisory on the probes of a rake or harness: one alarm
// with a count, whichever probe it is. It waits until a lost source, which would
// be its cause, has been noticed.
func probesLost(which, what, caution string) Rule {
	return Rule{
		Name: which + "_probe_lost", When: which + "_probes_lost > 0", Priority: Advisory, OnDelay: 3 * second, OffDelay: 5 * second, Group: groupSources,
		WorsenBy: 1,
		Title:    strings.ToUpper(what[:1]) + what[1:] + " lost",
		Text:     "{" + which + "_probes_lost:.0} " + what + "(s) excluded or without a value, {" + which + "_probes_used:.0} in use. The Rig page names them and the cause.",
		Caution:  caution,
		Response: "Facility procedure for lost instrumentation.",
	}
}

// daemonRules gives what is judged even when no scan comes.
func daemonRules() []Rule {
	return []Rule{
		{
			Name: "source_lost", When: "sources_lost > 0", Priority: Caution, OffDelay: 2 * second, Group: groupSources,
			WorsenBy: 1,
			Title:    "Data source lost",
			Text:     "{sources_lost:.0} data source(s) fell silent; the newest data is {data_age_s:s.1} old. Follow the facility's procedure for lost instrumentation." + notProtection,
			Caution:  "What these sources measure is not watched. Alarms that build on them are unknown.",
			Response: "Facility procedure for lost instrumentation.",
		},
		{
			Name: "input_path_deaf", When: "not health.input_path", Priority: Warning, OffDelay: second, Group: groupSources,
			Title:    "Input path deaf",
			Text:     "Probe messages do not come back from the broker: nothing on this page is live. Follow the facility's procedure for lost monitoring." + notProtection,
			Caution:  "Values on this page may be old and no limit is watched. Use the facility's own indications.",
			Response: "Facility procedure for lost monitoring.",
		},
		{
			Name: "not_recording", When: "not health.recording", Priority: Warning, OffDelay: second,
			Title:    "Not recording",
			Text:     "Data is shown but not stored. Follow the facility's procedure for lost recording.",
			Caution:  "What is measured now is lost for later evaluation. The watch itself goes on.",
			Response: "Facility procedure for lost recording.",
		},
		{
			Name: "disk_low", When: "not health.disk", Priority: Caution, OnDelay: second, OffDelay: second,
			Title:    "Disk soon full",
			Text:     "The disk of the data folder has {disk_free_gb:.1} GB left; the Rig page says for how long. Follow the facility's procedure for a disk that runs full.",
			Caution:  "On a full disk nothing is recorded. The watch itself goes on.",
			Response: "Facility procedure for a disk that runs full.",
		},
		{
			Name: "clock_skew", When: "not health.clock", Priority: Advisory, OnDelay: second, OffDelay: 5 * second,
			Title:    "Clock of a source is wrong",
			Text:     "A source's clock differs by {clock_skew_s:s.1}: receive time is used for its data.",
			Caution:  "Times of its data are those of arrival: delays in the network shift them.",
			Response: "Facility procedure for time synchronisation.",
		},
		{
			Name: "webhook_not_delivering", When: "not health.webhook", Priority: Advisory, OnDelay: 5 * second, OffDelay: second, Group: groupDelivery,
			Title:    "Webhook not delivering",
			Text:     "The site's receiver does not take alarms: {webhook_waiting:.0} wait. The Alarms page and MQTT have them.",
			Caution:  "Whoever relies on that receiver for awareness gets nothing new. What waits is sent in order once it takes alarms again.",
			Response: "Facility procedure for lost alarm forwarding.",
		},
		{
			Name: "database_behind", When: "not health.database", Priority: Advisory, OnDelay: 10 * second, OffDelay: 5 * second, Group: groupDelivery,
			Title:    "Site database behind",
			Text:     "The site's database does not take what is recorded: it is {database_lag_s:s.0} behind. The data folder has everything.",
			Caution:  "Displays that read the site's database show old values. What it lacks is written once it works again.",
			Response: "Facility procedure for a lost site database.",
		},
	}
}
