package pipeline

import (
	"slices"
	"time"

	"throatwatch/monitor/align"
	"throatwatch/monitor/check"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
)

// RigInfo is what a rig file says of the rig and engine, for people.
type RigInfo struct {
	ID            string `json:"id"`
	Title         string `json:"title"`
	EngineModel   string `json:"engine_model"`
	EngineSerial  string `json:"engine_serial"`
	EngineBuild   string `json:"engine_build"`
	NozzleSerial  string `json:"nozzle_serial"`
	LimitsVersion string `json:"limits_version"`
	TimeZone      string `json:"time_zone"` // of the facility, a name of the IANA database; "" = UTC

	NozzleMeasured string `json:"nozzle_measured_on"` // date of its throat area, YYYY-MM-DD
	Test           string `json:"test"`               // that the runs belong to
	Purpose        string `json:"purpose"`            // of the runs
	Fuel           Fuel   `json:"fuel"`
}

// Fuel is the batch of fuel that is burnt, as its certificate says.
type Fuel struct {
	Batch            string        `json:"batch"`
	Density          rules.Reading `json:"density_kg_m3"`
	HeatingValue     rules.Reading `json:"lower_heating_value_j_kg"` // at 25 °C
	HydrogenToCarbon rules.Reading `json:"hydrogen_to_carbon"`       // atoms
}

// Zone gives the facility's time zone, in which people are told times; UTC where none is
// stated, or none of this name is known.
func (r *RigInfo) Zone() *time.Location {
	zone, err := time.LoadLocation(r.TimeZone) // "" is UTC
	if err != nil {
		return time.UTC
	}
	return zone
}

// RunConfig says when a run ends by the state of the engine, and how runs are numbered.
type RunConfig struct {
	EndAfter int64 // ns in phase off before the run ends by itself

	Series string // of run numbers: what a number is made of, with RunPlace for the count; "" = none
	Width  int    // digits of the count at least
}

// OnFile lists the channels that have, or come to have, a sensor with a due date.
func (c *Config) OnFile() (channels []int) {
	for i := range c.Compute.Channels {
		ch := &c.Compute.Channels[i]
		if ch.Record.Expires != 0 || slices.ContainsFunc(ch.Swaps, func(s compute.Swap) bool { return s.Record.Expires != 0 }) {
			channels = append(channels, i)
		}
	}
	return channels
}

// Config is a whole rig as the step sees it: the parsed form of the text that a
// config record carries.
type Config struct {
	Rig     RigInfo
	Align   align.Config
	Compute compute.Config
	Rules   []rules.Rule
	Derived []rules.Derived // names that rules may read beside the standard ones
	Run     RunConfig
	Change  Change
	Checks  check.Limits // what is zero is as check.Defaults has it
	Hash    string       // hex SHA-256 of the text
}
