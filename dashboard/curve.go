package dashboard

import (
	"net/http"
	"net/url"
	"strconv"

	"throatwatch/monitor/compute"
	"throatwatch/monitor/gas"
	"throatwatch/monitor/nozzle"
	"throatwatch/monitor/unit"
	"throatwatch/rules/pipeline"
)

// The curve of the throat plane reaches from curveFrom to curveTo in NPR.
const (
	curveFrom   = 1.0
	curveTo     = 4.0
	curvePoints = 151
)

// curveJSON is the flow parameter against NPR, discharge coefficient included.
type curveJSON struct {
	NPR           []float64  `json:"npr"`
	FlowParameter []nullable `json:"flow_parameter"`
	CriticalNPR   float64    `json:"critical_npr"`
	ChokeNPR      float64    `json:"choke_npr"`
}

// curveQuery is the gas that a curve is asked for.
type curveQuery struct {
	temperature, fuel, humidity float64 // K; fuel-air and humidity ratio, dry basis
}

func parseCurve(q url.Values) (in curveQuery, err error) {
	in.temperature = 288.15
	for _, p := range []struct {
		name string
		dst  *float64
	}{{"total_temperature", &in.temperature}, {"fuel_air_ratio", &in.fuel}, {"humidity_ratio", &in.humidity}} {
		text := q.Get(p.name)
		if text == "" {
			continue
		}
		v, err := strconv.ParseFloat(text, 64)
		if err != nil || v-v != 0 {
			return in, badRequest("%s %q is not a number", p.name, text)
		}
		*p.dst = v
	}
	return in, nil
}

// throatCurve answers with the curve of a gas and the rig's nozzle.
func (s *Server) throatCurve(w http.ResponseWriter, r *http.Request) error {
	in, err := parseCurve(r.URL.Query())
	if err != nil {
		return err
	}
	var comp compute.Config
	if err := s.ask(r.Context(), r.PathValue("rig"), func(cfg *pipeline.Config, _ *pipeline.Machine, _ *pipeline.State) {
		comp = cfg.Compute
	}); err != nil {
		return err
	}
	out, err := curve(&comp, in)
	if err != nil {
		return badRequest("%v", err)
	}
	return reply(w, http.StatusOK, out)
}

// curve evaluates the nozzle from curveFrom to curveTo, closer where the curve
// rises steeply.
func curve(comp *compute.Config, in curveQuery) (out curveJSON, err error) {
	g, err := gas.NewMixture(comp.Fuel, in.fuel, in.humidity)
	if comp.Gamma > 0 {
		g, err = gas.Perfect(comp.Gamma, comp.GasR)
	}
	if err != nil {
		return out, err
	}
	n, err := nozzle.New(comp.Nozzle.Config)
	if err != nil {
		return out, err
	}
	const pb = 101325.0 // Pa; the curve does not depend on it
	for i := range curvePoints {
		x := float64(i) / (curvePoints - 1)
		npr := curveFrom + (curveTo-curveFrom)*x*x
		res, err := n.Evaluate(&g, nozzle.Inputs{
			TotalPressure: unit.Absolute(npr * pb / (1 - comp.Nozzle.DuctLoss)), BackPressure: pb,
			TotalTemperature: in.temperature, MetalTemperature: in.temperature,
		})
		if err != nil {
			return out, err
		}
		out.NPR = append(out.NPR, npr)
		out.FlowParameter = append(out.FlowParameter, nullable(res.Discharge*res.FlowParameter))
		out.CriticalNPR, out.ChokeNPR = res.CriticalNPR, res.ChokeNPR
	}
	return out, nil
}
