package dashboard

import (
	"net/http"
	"net/url"
	"strconv"

	"throatwatch/monitor/compute"
	"throatwatch/rules/pipeline"
)

// curveTo is the NPR up to which the curve of the throat plane reaches.
const curveTo = 4.0

// curveJSON is the flow parameter against NPR, discharge coefficient included.
type curveJSON struct {
	NPR           []float64  `json:"npr"`
	FlowParameter []nullable `json:"flow_parameter"`
	CriticalNPR   float64    `json:"critical_npr"`
	ChokeNPR      float64    `json:"choke_npr"`
}

func parseCurve(q url.Values) (in compute.CurveGas, err error) {
	in.Temperature = 288.15
	for _, p := range []struct {
		name string
		dst  *float64
	}{{"total_temperature", &in.Temperature}, {"fuel_air_ratio", &in.FuelAirRatio}, {"humidity_ratio", &in.HumidityRatio}} {
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
	c, err := compute.ThroatCurve(&comp, in, curveTo)
	if err != nil {
		return badRequest("%v", err)
	}
	return reply(w, http.StatusOK, curveJSON{c.NPR, nullables(c.FlowParameter), c.CriticalNPR, c.ChokeNPR})
}
