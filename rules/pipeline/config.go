package pipeline

import (
	"throatwatch/monitor/align"
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
}

// RunConfig says when a run begins and ends by the state of the engine.
type RunConfig struct {
	EndAfter int64 // ns in phase off before the run ends by itself
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
	Hash    string // hex SHA-256 of the text
}
