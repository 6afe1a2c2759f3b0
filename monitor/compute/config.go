package compute

import (
	"throatwatch/monitor/calib"
	"throatwatch/monitor/egt"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/phase"
	"throatwatch/monitor/rake"
	"throatwatch/monitor/steady"
)

// Channel is what the computation knows of a channel.
type Channel struct {
	ID    string
	Title string
	calib.Spec
	Record calib.Record
	Swaps  []Swap // sensors that took the place of the first, by rising From
	Zero   Zero   // of a pressure, where checks have found one and a reduction subtracts it
}

// Stations says which channels make which station value. Every entry is an
// index into Config.Channels, -1 when the rig has none.
type Stations struct {
	P7          []int // total-pressure probes of the nozzle entry rake
	MinP7       int   // fewest usable probes for a rake mean
	T7          []int // total-temperature probes of the rake
	MinT7       int
	T7FromEGT   float64 // t7 = factor · indicated EGT, 0 = not stated
	T7FactorU95 float64 // 95 % uncertainty of the factor
	EGT         []int   // probes of the EGT harness; one channel when wired in parallel
	EGTParallel bool
	EGTTrim     float64 // K added to the harness mean, as the engine's limits ask
	MinEGT      int
	EGTExponent float64 // x of referred EGT = EGT/θ^x; 1 by theory
	Barometer   int
	ExitPlane   int     // static pressure in the exit plane
	Depression  float64 // Pa, barometer − back pressure, used without ExitPlane
	DepressionU float64 // Pa, its 95 % uncertainty
	InletT      int     // total temperature at station 2
	InletP      int     // total pressure at station 2; the barometer when -1
	Humidity    int     // relative humidity, fraction
	DewPoint    bool    // Humidity is a dew point, K, instead
	AmbientT    int
	Speed       int
	FuelFlow    int
	Bellmouth   int // differential, inlet total less bellmouth throat static
	Thrust      int

	WaterFlow int // liquid water injected behind the bleed, all of it in the gas of the nozzle
	BleedFlow int // air bled overboard
	// Without BleedFlow the bleed is a share of the air flow, 0 = none.
	BleedShare    float64
	BleedShareU95 float64 // absolute 95 % uncertainty of the share
	BleedT        int     // temperature of the bleed air; the heat balance needs it

	// How the groups are watched. Probes and Least follow from the lists above; of
	// the rest, what is zero gets the value that a small gas turbine needs.
	P7Watch, T7Watch, EGTWatch rake.Watch

	WallStatic []int // static pressure at the wall of station 7, for a lost rake

	// The probes of the group are weighed by the mass flux at their places too, as the
	// probes of P7 and WallStatic show it; probe k of T7 stands at the place of k of P7.
	P7Flux, T7Flux bool

	Reheat     []int // flags, > 0.5 = the reheat is lit
	ThroatArea []int // throat area in m² by position, on the basis of the nozzle

	// StationPressure is that of the standard atmosphere at the rig's elevation, Pa;
	// 0 = the elevation is not known.
	StationPressure float64
}

// Recovery is how thermocouples in the moving gas of station 7 read: T + Factor·(T0 − T),
// T the static temperature that the flow through Area has.
type Recovery struct {
	Factor float64 // 0 = they are taken to read T0
	Area   float64 // A7, m²
	U95    float64 // absolute 95 % uncertainty of Factor
}

// HeatBalance gives T7 from the heat that goes into the gas,
//
//	W2 [h_air(T2) − h_air(298.15 K)] + Wf η LHV =
//	    (W2 + Wf + Ww − Wb) [h(T7) − h(298.15 K)] + Ww L + Wb [h_air(Tb) − h_air(298.15 K)]
//
// where shaft power and heat through the walls cancel or do not count. Water Ww is liquid at
// 25 °C, L its latent heat; bleed Wb leaves with the temperature Tb.
type HeatBalance struct {
	Efficiency   float64 // η of combustion
	HeatingValue float64 // LHV, J/kg, lower, at 25 °C; 0 = none
	U95          float64 // relative 95 % uncertainty of η·LHV with what the balance leaves out
}

// Steadiness is what is asked of a steady engine. The zero value finds none.
type Steadiness struct {
	Window      steady.Window
	Dwell       int64   // ns
	Pressure    float64 // largest slope of the rake pressure, fraction per second
	Temperature float64 // of T7, K/s
	Speed       float64 // of the rotor, fraction per second
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
	Recovery  Recovery
	Heat      HeatBalance
	Steady    Steadiness
	EGT       egt.Config
	Phase     phase.Config
}
