package dashboard

import (
	"net/http"
	"strconv"

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

// throatCurve answers with the curve of a gas and the rig's nozzle.
func (s *Server) throatCurve(w http.ResponseWriter, r *http.Request) error {
	var cfg pipeline.Config
	if err := s.ask(r, func(c *pipeline.Config, _ *pipeline.Machine, _ *pipeline.State) { cfg = *c }); err != nil {
		return err
	}
	in := map[string]float64{"total_temperature": 288.15, "fuel_air_ratio": 0, "humidity_ratio": 0}
	for key := range in {
		text := r.URL.Query().Get(key)
		if text == "" {
			continue
		}
		v, err := strconv.ParseFloat(text, 64)
		if err != nil {
			return badRequest("%s %q is not a number", key, text)
		}
		in[key] = v
	}
	comp := &cfg.Compute
	g, err := gas.NewMixture(comp.Fuel, in["fuel_air_ratio"], in["humidity_ratio"])
	if comp.Gamma > 0 {
		g, err = gas.Perfect(comp.Gamma, comp.GasR)
	}
	if err != nil {
		return badRequest("%v", err)
	}
	n, err := nozzle.New(comp.Nozzle.Config)
	if err != nil {
		return err
	}
	out := curveJSON{}
	const pb = 101325.0
	for i := range curvePoints {
		x := float64(i) / (curvePoints - 1)
		npr := curveFrom + (curveTo-curveFrom)*x*x // closer where the curve rises steeply
		res, err := n.Evaluate(&g, nozzle.Inputs{
			TotalPressure: unit.Absolute(npr * pb / (1 - comp.Nozzle.DuctLoss)), BackPressure: pb,
			TotalTemperature: in["total_temperature"], MetalTemperature: in["total_temperature"],
		})
		if err != nil {
			return badRequest("%v", err)
		}
		out.NPR = append(out.NPR, npr)
		out.FlowParameter = append(out.FlowParameter, nullable(res.Discharge*res.FlowParameter))
		out.CriticalNPR, out.ChokeNPR = res.CriticalNPR, res.ChokeNPR
	}
	return reply(w, http.StatusOK, out)
}
