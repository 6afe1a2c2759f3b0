package compute

import (
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
)

// Channel is what the computation knows of a channel.
type Channel struct {
	ID    string
	Title string
	calib.Spec
}

// Stations says which channels make which station value. Every entry is an
// index into Config.Channels, -1 when the rig has none.
type Stations struct {
	P7          []int // total-pressure probes of the nozzle entry rake
	MinP7       int   // fewest usable probes for a rake mean
	T7          []int // total-temperature probes of the rake, empty when T7 comes from EGT
	MinT7       int
	T7FromEGT   float64 // t7 = factor · indicated EGT, 0 = not stated
	T7FactorU95 float64 // 95 % uncertainty of the factor
	EGT         []int   // probes of the EGT harness; one channel when wired in parallel
	EGTParallel bool
	EGTTrim     float64 // K added to the harness mean, as the engine's limits ask
	MinEGT      int
	Barometer   int
	ExitPlane   int     // static pressure in the exit plane
	Depression  float64 // Pa, barometer − back pressure, used without ExitPlane
	DepressionU float64 // Pa, its 95 % uncertainty
	InletT      int     // total temperature at station 2
	InletP      int     // total pressure at station 2; the barometer when -1
	Humidity    int     // relative humidity, fraction
	AmbientT    int
	Speed       int
	FuelFlow    int
	Bellmouth   int // differential, inlet total less bellmouth throat static
	Thrust      int
}

// Bellmouth is the air-flow meter at the inlet.
type Bellmouth struct {
	Area        float64 // m², 0 = none
	Coefficient float64
	U95         float64 // relative 95 % uncertainty of Area·Coefficient
}

// Nozzle is the nozzle of the run with the uncertainties of its geometry.
type Nozzle struct {
	nozzle.Config
	MetalLag       int64   // ns, time constant of the metal behind the gas temperature
	AreaU95        float64 // relative
	DischargeU95   float64 // relative
	ThrustU95      float64 // relative
	ChokeNPRU95    float64 // relative uncertainty of the nozzle model; 0 = not stated
	Hysteresis     float64 // percent of margin
	ArmedAboveRPM  float64 // choke expected above this speed, 0 = never by speed
	ArmedHysterRPM float64
}

// Config is everything the computation needs to know of a rig.
type Config struct {
	Channels  []Channel
	Stations  Stations
	Fuel      gas.Fuel
	Gamma     float64 // > 0: perfect gas with this γ and GasConstant
	GasR      float64
	Nozzle    Nozzle
	Bellmouth Bellmouth
	EGT       egt.Config
	Phase     phase.Config
}
