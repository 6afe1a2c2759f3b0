package config

import (
	"math"
	"reflect"
	"testing"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/steady"
	"throatwatch/monitor/uncertainty"
)

// Sources of station values and what is asked of a steady engine arrive in SI.
func TestSources(t *testing.T) {
	_, so := load(t, "../../../testdata/config/good/sources.yaml")
	_, ex := load(t, example)
	_, mi := load(t, minimal)
	const (
		inch  = 0.0254
		pound = 0.45359237
		psi   = pound * 9.80665 / inch / inch
		btu   = 1055.05585262 // J, international table
		conv  = "converted by hand from the rig file with the exact factors of NIST SP 811"
		file  = "as the rig file says"
	)
	s, e := &so.Compute.Stations, &ex.Compute
	for _, tt := range []struct {
		name      string
		got, want float64
		tolerance float64 // relative
		source    string
	}{
		{"departure", s.P7Watch.Departure, 0.3 * psi, 1e-12, conv},
		{"sampling, standard", s.P7Watch.Sampling, 500 / uncertainty.Coverage, 1e-12, "0.5 kPa at 95 %"},
		{"heating value", so.Compute.Heat.HeatingValue, 18500 * btu / pound, 1e-9, conv},
		{"efficiency", so.Compute.Heat.Efficiency, 0.99, 1e-12, file},
		{"its uncertainty", so.Compute.Heat.U95, 0.012, 1e-12, file},
		{"station pressure", s.StationPressure, 89874.6, 1e-5, "ISO 2533:1975 table 1, 1000 m"},
		{"steady: pressure", so.Compute.Steady.Pressure, 0.001 / 60, 1e-12, file},
		{"steady: temperature", so.Compute.Steady.Temperature, 3.0 / 60, 1e-12, file},
		{"steady: speed", so.Compute.Steady.Speed, 0.0025 / 60, 1e-12, "default of this package"},
		{"steady: dwell", float64(so.Compute.Steady.Dwell), 30e9, 0, file},
		{"example: bleed", e.Stations.BleedShare, 0.004, 1e-12, file},
		{"example: bleed, uncertainty", e.Stations.BleedShareU95, 0.002, 1e-12, file},
		{"example: recovery", e.Recovery.Factor, 0.95, 0, file},
		{"example: passage", e.Recovery.Area, 0.055, 1e-12, file},
		{"example: recovery, uncertainty", e.Recovery.U95, 0.02, 0, file},
		{"example: heating value", e.Heat.HeatingValue, 43.1e6, 1e-12, file},
		{"example: departure of T7", e.Stations.T7Watch.Departure, 40, 1e-12, file},
		{"example: no departure of EGT", e.Stations.EGTWatch.Departure, 0, 0, "none stated"},
		{"example: station pressure", e.Stations.StationPressure, 99796.7, 1e-6, "101325 (1 − 0.0065·128/288.15)^5.25588"},
		{"smallest: no station pressure", mi.Compute.Stations.StationPressure, 0, 0, "no elevation"},
		{"smallest: no recovery", mi.Compute.Recovery.Factor, 0, 0, "none stated"},
	} {
		if !(math.Abs(tt.got-tt.want) <= tt.tolerance*math.Abs(tt.want)) {
			t.Errorf("%s: %v, want %v (%s)", tt.name, tt.got, tt.want, tt.source)
		}
	}
	id := func(i int) string { return so.Compute.Channels[i].ID }
	for _, tt := range []struct {
		name      string
		got, want any
	}{
		{"weights", s.P7Watch.Weights, []float64{1, 2, 1.5}},
		{"by flow too", s.P7Flux, true},
		{"water, bleed and its temperature", []string{id(s.WaterFlow), id(s.BleedFlow), id(s.BleedT)}, []string{"ww", "wb", "t_3"}},
		{"no share of bleed", s.BleedShare, 0.0},
		{"thermocouple", so.Compute.Channels[s.BleedT].Uncertainty, calib.Uncertainty{Thermocouple: calib.Thermocouple{Type: 'N', Class: 1}, Stated: true}},
		{"example: T7 by flow", e.Stations.T7Flux, true},
		{"example: p7 by area", e.Stations.P7Flux, false},
		{"example: thermocouple", e.Channels[e.Stations.T7[3]].Uncertainty.Thermocouple, calib.Thermocouple{Type: 'K', Class: 2}},
		{"smallest: no water, no bleed", []int{mi.Compute.Stations.WaterFlow, mi.Compute.Stations.BleedFlow, mi.Compute.Stations.BleedT}, []int{-1, -1, -1}},
		{"taps", []string{id(s.WallStatic[0]), id(s.WallStatic[1])}, []string{"ps_1", "ps_2"}},
		{"dew point", id(s.Humidity), "t_dew"},
		{"is one", s.DewPoint, true},
		{"reheat", []string{id(s.Reheat[0]), id(s.Reheat[1])}, []string{"ab_main", "ab_pilot"}},
		{"throat", []string{id(s.ThroatArea[0]), id(s.ThroatArea[1])}, []string{"a8_left", "a8_right"}},
		{"no fixed throat", so.Compute.Nozzle.ThroatArea, 0.0},
		{"no probes of T7", len(s.T7), 0},
		{"window of 5 min", so.Compute.Steady.Window, steady.Window{Width: 25e8, Bins: 120}},
		{"example: window of 20 s", e.Steady.Window, steady.Window{Width: 5e8, Bins: 40}},
		{"smallest: window of a minute", mi.Compute.Steady.Window, steady.Window{Width: 5e8, Bins: 120}},
		{"example: T7 from EGT as the last source", e.Stations.T7FromEGT, 0.97},
		{"example: wall tap", e.Channels[e.Stations.WallStatic[0]].ID, "p7_wall"},
	} {
		if !reflect.DeepEqual(tt.got, tt.want) {
			t.Errorf("%s: %v, want %v", tt.name, tt.got, tt.want)
		}
	}
}
