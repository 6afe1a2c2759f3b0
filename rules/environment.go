package rules

import (
	"math"
	"slices"

	"throatwatch/monitor"
	"throatwatch/monitor/unit"
)

// Type is the type of a name or of an expression.
type Type uint8

// The types.
const (
	Number Type = iota + 1
	Bool
	Text
)

// String names the type as messages use it.
func (t Type) String() string {
	switch t {
	case Number:
		return "a number"
	case Bool:
		return "true or false"
	case Text:
		return "a text"
	}
	return "invalid"
}

// Name is a value that expressions and texts may read.
type Name struct {
	Name      string         // identifiers joined by dots
	Type      Type           //
	Unit      string         // of a number as rules see it; "" = a plain number
	Dimension unit.Dimension // of a number; Invalid = its unit does not convert
	Rate      bool           // of a number: it is per second
	Low, High float64        // between which a number lies; equal = not known
	Values    []string       // all values that a text can have
	Daemon    bool           // says how the daemon does, not the engine: known without a scan
}

// Tri is a truth value of three. The zero value is Unknown.
type Tri int8

// The truth values.
const (
	False   Tri = -1
	Unknown Tri = 0
	True    Tri = 1
)

// TriOf gives the truth value of a condition that is known.
func TriOf(b bool) Tri {
	if b {
		return True
	}
	return False
}

// String names the truth value.
func (t Tri) String() string {
	switch t {
	case True:
		return "true"
	case False:
		return "false"
	case Unknown:
	}
	return "unknown"
}

// Frame holds the values of all names of an environment at one instant. Each
// slice has one entry per name, in the order of the environment; the entry in
// the slice of the name's type counts. NaN, Unknown and "" are not known.
// The caller owns it and fills it before each step.
type Frame struct {
	Numbers []float64
	Bools   []Tri
	Texts   []string
}

// NewFrame gives a frame for names in which nothing is known.
func NewFrame(names []Name) Frame {
	f := Frame{Numbers: make([]float64, len(names)), Bools: make([]Tri, len(names)), Texts: make([]string, len(names))}
	for i := range f.Numbers {
		f.Numbers[i] = math.NaN()
	}
	return f
}

// Channel is a channel as rules see it: in SI, a gauge pressure made absolute.
type Channel struct {
	ID        string
	Dimension unit.Dimension
	Low, High float64 // of its range, SI; equal = not known
}

// StandardNames gives the environment of a rig with these channels and EGT
// bands, in a fixed order:
//
//	every monitor.Quantity by its key
//	choke_state phase back_pressure_from                   text
//	total_pressure_from total_temperature_from             text
//	choke_armed_by                                         text: what arms choke, or disarms it
//	choke_armed choke_marginal lit run_active steady       true or false
//	egt_probes_used egt_probes_lost rake_probes_used rake_probes_lost
//	health.recording health.input_path health.clock health.sources   true = works
//	health.webhook health.database                         true = works, or there is none
//	health.disk                                            true = not soon full
//	sources_lost data_age_s clock_skew_s webhook_waiting database_lag_s
//	disk_free_gb                                           while it will soon be full, else 0
//	sensors_failed failed_sensor failed_finding            proven findings: how many, the first of them
//	sensors_doubtful doubtful_sensor doubtful_finding      suspected ones, but for hot EGT probes:
//	egt_hot_probes egt_hot_probe egt_hot_by_k
//	calibrations_expired expired_sensor                    of sensors that make station values, without a waiver
//	channel.<id> quality.<id> finding.<id> usable.<id>     SI value, quality, what is wrong, may be used
//	egt.<band>.over .exceeded .elapsed_s .remaining_s
func StandardNames(channels []Channel, bands []string) []Name {
	var names []Name
	for q := range monitor.NumQuantities {
		info := q.Info()
		u, rate, ok := parseWritten(info.Unit)
		if !ok {
			u = unit.Unit{} // a unit without conversions, such as J/(kg K)
		}
		if q == monitor.EGTSpread || q == monitor.EGTRise {
			u = u.Difference()
		}
		names = append(names, Name{Name: info.Name, Type: Number, Unit: info.Unit, Dimension: u.Dimension, Rate: rate})
	}
	var states, phases, sources, qualities []string
	for s := monitor.NoFlow; s <= monitor.Choked; s++ {
		states = append(states, s.String())
	}
	for p := monitor.Off; p < monitor.NumPhases; p++ {
		phases = append(phases, p.String())
	}
	for s := range monitor.NumSources {
		sources = append(sources, s.String())
	}
	for q := range monitor.NumQualities {
		qualities = append(qualities, q.String())
	}
	findings := append([]string{"none"}, monitor.FindingKinds()...)
	count := func(name string) Name { return Name{Name: name, Type: Number, Dimension: unit.Ratio} }
	seconds := func(name string) Name { return Name{Name: name, Type: Number, Unit: "s", Dimension: unit.Time} }
	flag := func(name string) Name { return Name{Name: name, Type: Bool} }
	daemon := func(n Name) Name { n.Daemon = true; return n }
	armedBy := []string{monitor.BySpeed.String(), monitor.ByCard.String()}
	names = append(names,
		Name{Name: "choke_armed_by", Type: Text, Values: armedBy},
		Name{Name: "choke_state", Type: Text, Values: states},
		Name{Name: "phase", Type: Text, Values: phases},
		Name{Name: "back_pressure_from", Type: Text, Values: sources},
		Name{Name: "total_pressure_from", Type: Text, Values: sources},
		Name{Name: "total_temperature_from", Type: Text, Values: sources},
		flag("choke_armed"), flag("choke_marginal"), flag("lit"), flag("steady"), daemon(flag("run_active")),
		count("egt_probes_used"), count("egt_probes_lost"), count("rake_probes_used"), count("rake_probes_lost"),
		count("sensors_failed"), Name{Name: "failed_sensor", Type: Text}, Name{Name: "failed_finding", Type: Text, Values: findings},
		count("sensors_doubtful"), Name{Name: "doubtful_sensor", Type: Text}, Name{Name: "doubtful_finding", Type: Text, Values: findings},
		count("egt_hot_probes"), Name{Name: "egt_hot_probe", Type: Text},
		count("calibrations_expired"), Name{Name: "expired_sensor", Type: Text},
		Name{Name: "egt_hot_by_k", Type: Number, Unit: "K", Dimension: unit.TemperatureDifference},
		daemon(flag("health.recording")), daemon(flag("health.input_path")), daemon(flag("health.clock")),
		daemon(flag("health.sources")), daemon(count("sources_lost")),
		daemon(seconds("data_age_s")), daemon(seconds("clock_skew_s")),
		daemon(flag("health.webhook")), daemon(flag("health.database")), daemon(count("webhook_waiting")), daemon(seconds("database_lag_s")),
		daemon(flag("health.disk")), daemon(count("disk_free_gb")),
	)
	for i := range channels {
		ch := &channels[i]
		id, name := ch.ID, ch.Dimension.SI().Name
		if ch.Dimension == unit.Ratio {
			name = ""
		}
		names = append(names,
			Name{Name: "channel." + id, Type: Number, Unit: name, Dimension: ch.Dimension, Low: ch.Low, High: ch.High},
			Name{Name: "quality." + id, Type: Text, Values: slices.Clip(qualities)},
			Name{Name: "finding." + id, Type: Text, Values: findings},
			flag("usable."+id))
	}
	for _, b := range bands {
		names = append(names, flag("egt."+b+".over"), flag("egt."+b+".exceeded"),
			seconds("egt."+b+".elapsed_s"), seconds("egt."+b+".remaining_s"))
	}
	return names
}

// index finds the slots of names.
type index map[string]int

func indexOf(names []Name) index {
	ix := make(index, len(names))
	for i := range names {
		ix[names[i].Name] = i
	}
	return ix
}
