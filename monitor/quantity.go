package monitor

import "math"

// Quantity is one number of an operating point. Its name is the key in JSON, in
// stored columns, in rule expressions and in queries.
type Quantity int

// The quantities. Keys with a unit at the end say the unit of the value.
const (
	NPR Quantity = iota
	NPRU95
	NPRRake
	CriticalNPR
	ChokeNPR
	ChokeMarginPercent
	ChokeMarginPercentU95
	ChokeMarginPercentLow95
	ChokeMarginPercentHigh95
	ChokeMarginPa
	PChoked
	ThroatMach
	ThroatMachLow95
	ThroatMachHigh95
	ThroatPressure
	ThroatPressureLow95
	ThroatPressureHigh95
	ThroatTemperature
	ThroatTemperatureLow95
	ThroatTemperatureHigh95
	CriticalPressure
	CriticalTemperature
	MassFlow
	MassFlowU95
	ExitVelocity
	ExitVelocityLow95
	ExitVelocityHigh95
	GrossThrust
	GrossThrustU95
	GammaTotal
	GasConstant
	FlowParameter
	TotalPressure
	RakePressure
	TotalTemperature
	BackPressure
	Barometer
	FuelAirRatio
	HumidityRatio
	WaterAirRatio
	ThroatArea
	DischargeCoefficient
	ThrustCoefficient
	AirFlow
	FuelFlow
	WaterFlow
	BleedFlow
	FlowBalance
	FlowBalanceU95
	FlowBalanceBaseline
	EffectiveArea
	EffectiveAreaU95
	IndependentFlow
	IndependentFlowU95
	IndependentFlowParameter
	EGTIndicated
	EGTSpread
	EGTHottest
	EGTColdest
	Speed
	SpeedRate
	MeasuredThrust
	ReferredFlow
	ReferredSpeed
	ReferredEGT
	ReferredThrust
	ChokeLossIn
	ChokeLossInLow95
	ChokeLossInHigh95
	EGTLimitIn
	EGTLimitInLow95
	EGTLimitInHigh95
	EGTRise
	StarterTime
	StarterHour
	RundownTime
	StarterStarts
	SinceFuelOff
	SinceRest
	CoolDownLeft
	NumQuantities
)

// Info describes a quantity.
type Info struct {
	Name  string // the key
	Unit  string // unit of the value, "" for a plain number
	Title string // for people
}

var infos = [NumQuantities]Info{
	NPR:                      {"npr", "", "Nozzle pressure ratio p8/pb"},
	NPRU95:                   {"npr_u95", "", "NPR, 95 % uncertainty"},
	NPRRake:                  {"npr_rake", "", "Rake pressure ratio p7/pb"},
	CriticalNPR:              {"critical_npr", "", "Critical NPR, one-dimensional, this gas"},
	ChokeNPR:                 {"choke_npr", "", "Choke NPR used for the state"},
	ChokeMarginPercent:       {"choke_margin_percent", "%", "Choke margin"},
	ChokeMarginPercentU95:    {"choke_margin_percent_u95", "%", "Choke margin, 95 % uncertainty"},
	ChokeMarginPercentLow95:  {"choke_margin_percent_low95", "%", "Choke margin, lower 95 % bound"},
	ChokeMarginPercentHigh95: {"choke_margin_percent_high95", "%", "Choke margin, upper 95 % bound"},
	ChokeMarginPa:            {"choke_margin_pa", "Pa", "Critical pressure less back pressure"},
	PChoked:                  {"p_choked", "", "Probability of choked flow"},
	ThroatMach:               {"throat_mach", "", "Throat Mach number"},
	ThroatMachLow95:          {"throat_mach_low95", "", "Throat Mach number, lower 95 % bound"},
	ThroatMachHigh95:         {"throat_mach_high95", "", "Throat Mach number, upper 95 % bound"},
	ThroatPressure:           {"throat_pressure_pa", "Pa", "Throat static pressure"},
	ThroatPressureLow95:      {"throat_pressure_pa_low95", "Pa", "Throat static pressure, lower 95 % bound"},
	ThroatPressureHigh95:     {"throat_pressure_pa_high95", "Pa", "Throat static pressure, upper 95 % bound"},
	ThroatTemperature:        {"throat_temperature_k", "K", "Throat static temperature"},
	ThroatTemperatureLow95:   {"throat_temperature_k_low95", "K", "Throat static temperature, lower 95 % bound"},
	ThroatTemperatureHigh95:  {"throat_temperature_k_high95", "K", "Throat static temperature, upper 95 % bound"},
	CriticalPressure:         {"critical_pressure_pa", "Pa", "Critical pressure p*"},
	CriticalTemperature:      {"critical_temperature_k", "K", "Critical temperature T*"},
	MassFlow:                 {"mass_flow_kg_s", "kg/s", "Nozzle mass flow W8"},
	MassFlowU95:              {"mass_flow_kg_s_u95", "kg/s", "W8, 95 % uncertainty"},
	ExitVelocity:             {"exit_velocity_m_s", "m/s", "Throat velocity V8"},
	ExitVelocityLow95:        {"exit_velocity_m_s_low95", "m/s", "Throat velocity V8, lower 95 % bound"},
	ExitVelocityHigh95:       {"exit_velocity_m_s_high95", "m/s", "Throat velocity V8, upper 95 % bound"},
	GrossThrust:              {"gross_thrust_n", "N", "Gross thrust, computed"},
	GrossThrustU95:           {"gross_thrust_n_u95", "N", "Gross thrust, 95 % uncertainty"},
	GammaTotal:               {"gamma_total", "", "Ratio of specific heats at T8"},
	GasConstant:              {"gas_constant_j_kg_k", "J/(kg K)", "Gas constant"},
	FlowParameter:            {"flow_parameter", "", "Flow parameter W√(R T0)/(A p0)"},
	TotalPressure:            {"total_pressure_pa", "Pa", "Nozzle total pressure p8"},
	RakePressure:             {"rake_pressure_pa", "Pa", "Total pressure p7, nozzle entry"},
	TotalTemperature:         {"total_temperature_k", "K", "Nozzle gas temperature T8"},
	BackPressure:             {"back_pressure_pa", "Pa", "Back pressure"},
	Barometer:                {"barometer_pa", "Pa", "Barometer, station pressure"},
	FuelAirRatio:             {"fuel_air_ratio", "", "Fuel-air ratio, dry basis"},
	HumidityRatio:            {"humidity_ratio", "", "Humidity ratio, dry basis"},
	WaterAirRatio:            {"water_air_ratio", "", "Water-air ratio of the nozzle gas, dry basis"},
	ThroatArea:               {"throat_area_m2", "m²", "Throat area, hot"},
	DischargeCoefficient:     {"discharge_coefficient", "", "Discharge coefficient"},
	ThrustCoefficient:        {"thrust_coefficient", "", "Thrust coefficient"},
	AirFlow:                  {"air_flow_kg_s", "kg/s", "Bellmouth air flow W2"},
	FuelFlow:                 {"fuel_flow_kg_s", "kg/s", "Fuel flow"},
	WaterFlow:                {"water_flow_kg_s", "kg/s", "Injected water flow"},
	BleedFlow:                {"bleed_flow_kg_s", "kg/s", "Bleed air flow, overboard"},
	FlowBalance:              {"flow_balance_kg_s", "kg/s", "Metered flow less W8"},
	FlowBalanceU95:           {"flow_balance_kg_s_u95", "kg/s", "Metered flow less W8, 95 % uncertainty"},
	FlowBalanceBaseline:      {"flow_balance_baseline_kg_s", "kg/s", "Metered flow less W8, the engine's own baseline"},
	EffectiveArea:            {"effective_area_m2", "m²", "Throat area that the metered flow implies, hot"},
	EffectiveAreaU95:         {"effective_area_m2_u95", "m²", "Throat area that the metered flow implies, 95 % uncertainty"},
	IndependentFlow:          {"independent_flow_kg_s", "kg/s", "Metered flow: air + fuel + water − bleed"},
	IndependentFlowU95:       {"independent_flow_kg_s_u95", "kg/s", "Metered flow, 95 % uncertainty"},
	IndependentFlowParameter: {"independent_flow_parameter", "", "Flow parameter from the metered flow"},
	EGTIndicated:             {"egt_indicated_k", "K", "Indicated EGT"},
	EGTSpread:                {"egt_spread_k", "K", "EGT spread, hottest less coldest"},
	EGTHottest:               {"egt_hottest_k", "K", "Hottest EGT probe"},
	EGTColdest:               {"egt_coldest_k", "K", "Coldest EGT probe"},
	Speed:                    {"speed_rpm", "rpm", "Rotor speed"},
	SpeedRate:                {"speed_rate_rpm_s", "rpm/s", "Rate of rotor speed"},
	MeasuredThrust:           {"measured_thrust_n", "N", "Load-cell thrust, uncorrected"},
	ReferredFlow:             {"referred_flow_kg_s", "kg/s", "Referred flow W√θ/δ"},
	ReferredSpeed:            {"referred_speed_rpm", "rpm", "Referred speed N/√θ"},
	ReferredEGT:              {"referred_egt_k", "K", "Referred EGT, indicated EGT over θ to a power"},
	ReferredThrust:           {"referred_thrust_n", "N", "Referred thrust F/δ"},
	ChokeLossIn:              {"choke_loss_in_s", "s", "Forecast: time to the loss of choke"},
	ChokeLossInLow95:         {"choke_loss_in_s_low95", "s", "Forecast: time to the loss of choke, lower 95 % bound"},
	ChokeLossInHigh95:        {"choke_loss_in_s_high95", "s", "Forecast: time to the loss of choke, upper 95 % bound"},
	EGTLimitIn:               {"egt_limit_in_s", "s", "Forecast: time to the next EGT limit"},
	EGTLimitInLow95:          {"egt_limit_in_s_low95", "s", "Forecast: time to the next EGT limit, lower 95 % bound"},
	EGTLimitInHigh95:         {"egt_limit_in_s_high95", "s", "Forecast: time to the next EGT limit, upper 95 % bound"},
	EGTRise:                  {"egt_rise_k", "K", "EGT above its lowest since the fuel is off"},
	StarterTime:              {"starter_s", "s", "Time of cranking in one go"},
	StarterHour:              {"starter_hour_s", "s", "Time of cranking in the last hour"},
	RundownTime:              {"rundown_s", "s", "Time of the last rundown, from below idle to rest"},
	StarterStarts:            {"starter_starts_hour", "", "Starter engagements in the last hour"},
	SinceFuelOff:             {"fuel_off_s", "s", "Time since the fuel is off after a run"},
	SinceRest:                {"rest_s", "s", "Time since the rotor rests after a run"},
	CoolDownLeft:             {"cooldown_left_s", "s", "Time left of the cool-down"},
}

// Info gives name, unit and title.
func (q Quantity) Info() Info { return infos[q] }

// ParseQuantity gives the quantity of a key, and whether there is one.
func ParseQuantity(key string) (Quantity, bool) {
	for q := range infos {
		if infos[q].Name == key {
			return Quantity(q), true
		}
	}
	return 0, false
}

// Cause says why a quantity or state is not available. The zero value says that
// it is.
type Cause struct {
	Kind    CauseKind
	Channel int32 // index of the channel that is to blame, -1 when none is
	Quality Quality
}

// CauseKind is the kind of a cause.
type CauseKind uint8

// The kinds of cause.
const (
	Available       CauseKind = iota
	NotConfigured             // the rig file gives no way to know it
	ChannelBad                // Channel has Quality
	NoFlowYet                 // below the resolution floor
	OutsideGasRange           // temperature or composition outside the gas data
	AreaUnknown               // throat area not known
	NotStated                 // an uncertainty that is needed is not stated
	NotEnoughProbes           // too few usable probes
	EngineNotLit              // defined only with a flame
	ReheatLit                 // the gas behind the turbine burns: neither T8 nor area are those computed
	numCauseKinds
)

var causeNames = [numCauseKinds]string{
	"available", "not_configured", "channel", "no_flow", "outside_gas_range", "area_unknown", "not_stated", "not_enough_probes", "not_lit", "reheat",
}

// String gives the name of the kind.
func (k CauseKind) String() string { return name(causeNames[:], k) }

// Reason says what speaks against a steady state or a forecast. The zero value says
// that nothing does.
type Reason uint8

// The reasons.
const (
	NoReason            Reason = iota
	ReasonNotConfigured        // the rig file asks for none
	ReasonPhase                // not in a steady phase, nor at idle
	// Of a steady state: those of steady.Why, in their order.
	ReasonFilling
	ReasonGaps
	ReasonCorrelated
	ReasonTrend
	ReasonScatter
	ReasonSwing
	ReasonDwell
	// Of a forecast: those of steady.NoForecast, in their order.
	ReasonNotSteady
	ReasonNotEnough
	ReasonPastLimit
	ReasonNoTrend
	ReasonLevelling
	ReasonTooFarAhead
	ReasonNoLimit // there is none above
	numReasons
)

var reasonNames = [numReasons]string{
	"", "not_configured", "phase",
	"filling", "gaps", "correlated", "trend", "scatter", "swing", "dwell",
	"not_steady", "not_enough", "past_limit", "no_trend", "levelling", "too_far_ahead", "no_limit",
}

// String gives the code used in JSON, "" for no reason.
func (r Reason) String() string { return name(reasonNames[:], r) }

// ArmedBy says what decides whether the throat is expected choked.
type ArmedBy uint8

// What decides it. The zero value is nothing.
const (
	ByNobody ArmedBy = iota
	BySpeed          // the speed rule of the rig file arms
	ByCard           // the current point of the test card arms or disarms
	numArmedBy
)

var armedByNames = [numArmedBy]string{"", "speed_rule", "test_card"}

// String gives the code used in JSON, "" for nothing.
func (a ArmedBy) String() string { return name(armedByNames[:], a) }

// Warning is a bit of OperatingPoint.Warnings.
type Warning uint32

// The warnings of an operating point.
const (
	WarnGasRange Warning = 1 << iota
	WarnOverStoichiometric
	WarnRealGas
	WarnCoefficientRange
	WarnPressureOrder // rake below back pressure: reversed or miswired
	WarnFuelFrozen    // fuel-air ratio held from before the flow floor
	WarnAssumedFuel   // fuel-air ratio not measured
	WarnAssumedHumidity
	WarnBarometer       // not a station pressure of the rig's elevation
	WarnPressureBridged // rake lost, p7 from wall static
	WarnGasBridged      // T7 from another source than the first one
	WarnFlowBalance     // the residual departs from the engine's baseline
	WarnAssumedWater    // injected water not measured, its ratio is held
	WarnWeightsHeld     // mass-flux weights of a rake cannot be formed
	NumWarnings         = 14
)

var warningTexts = [NumWarnings]string{
	"temperature outside the gas data (200 to 1800 K): values extrapolate",
	"fuel-air ratio above stoichiometric: limited",
	"real-gas effects above 0.1 % are likely at this pressure and temperature",
	"discharge or thrust coefficient outside its table: end value used",
	"nozzle total pressure below back pressure",
	"fuel-air ratio held: flow too small to close it",
	"fuel-air ratio not measured: taken as zero",
	"humidity not measured: dry air assumed",
	"barometer differs by more than 6 % from the standard atmosphere at the rig's elevation: another unit, or not the station pressure",
	"total-pressure rake lost: p7 from wall static pressure and the ratio learned before",
	"first source of T7 lost: another one stands in",
	"flow balance departs from the engine's baseline",
	"water flow not measured: its ratio is held",
	"mass-flux weights held: wall static pressure or a probe of the rake is missing",
}

// Each calls yield with the text of every warning that is set.
func (w Warning) Each(yield func(string) bool) {
	for i := range NumWarnings {
		if w&(1<<i) != 0 && !yield(warningTexts[i]) {
			return
		}
	}
}

// OperatingPoint is everything computed from one scan. It holds no pointers: a
// copy is a value of its own.
type OperatingPoint struct {
	T              int64 // event time of the scan, ns UTC
	Scan           uint64
	V              [NumQuantities]float64 // NaN when not available
	Choke          ChokeState
	ChokeMarginal  bool
	ChokeArmed     bool
	ArmedBy        ArmedBy // who says so; ByNobody where choke is not armed and no card disarms it
	Lit            bool
	LitKnown       bool // false until Lit says something
	Phase          Phase
	BackFrom       Source
	TemperatureBy  Source
	ChokeNPRFrom   Source
	PressureBy     Source // of p7
	Steady         bool   // steady phase, and nothing speaks against it
	NotSteady      Reason // why it is not steady
	NoChokeLoss    Reason // why there is no forecast of the loss of choke
	NoEGTLimit     Reason // why there is no forecast of the next EGT limit
	Warnings       Warning
	Cause          Cause // why the choke state is unknown, when it is
	EGTCause       Cause // why indicated EGT is missing, when it is
	EGTProbesUsed  int16
	RakeProbesUsed int16
}

// Reset makes every quantity unavailable.
func (p *OperatingPoint) Reset() {
	*p = OperatingPoint{}
	for q := range p.V {
		p.V[q] = math.NaN()
	}
}

// Get gives a quantity and whether it is available.
func (p *OperatingPoint) Get(q Quantity) (float64, bool) {
	v := p.V[q]
	return v, v == v
}
