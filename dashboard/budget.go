package dashboard

import (
	"net/http"

	"throatwatch/monitor/compute"
	"throatwatch/rules/pipeline"
)

// budgetJSON is an uncertainty budget as HTTP shows it.
type budgetJSON struct {
	T       string             `json:"t"`
	Scan    uint64             `json:"scan"`
	Outputs []budgetOutputJSON `json:"outputs"`
}

type budgetOutputJSON struct {
	Quantity   string            `json:"quantity"`
	Unit       string            `json:"unit"`
	Value      nullable          `json:"value"`
	U95        nullable          `json:"u95"`
	Low95      nullable          `json:"low95"`
	High95     nullable          `json:"high95"`
	Systematic nullable          `json:"systematic"`
	Random     nullable          `json:"random"`
	Inputs     []budgetInputJSON `json:"inputs"`
}

type budgetInputJSON struct {
	Input        string           `json:"input"`
	Contribution nullable         `json:"contribution"`
	Share        nullable         `json:"share"`
	Parts        []budgetPartJSON `json:"parts"`
}

type budgetPartJSON struct {
	Channel *string  `json:"channel"`
	What    string   `json:"what"`
	Share   nullable `json:"share"`
}

// budget answers with the uncertainty budget of the last scan.
func (s *Server) budget(w http.ResponseWriter, r *http.Request) error {
	var out budgetJSON
	known := false
	if err := s.ask(r.Context(), r.PathValue("rig"), func(cfg *pipeline.Config, m *pipeline.Machine, _ *pipeline.State) {
		var b compute.Budget
		if b, known = m.Budget(); known {
			out = budgetView(&b, cfg)
		}
	}); err != nil {
		return err
	}
	if !known {
		return &problem{http.StatusServiceUnavailable, "the last scan has no budget: an input of the nozzle is missing"}
	}
	return reply(w, http.StatusOK, out)
}

func budgetView(b *compute.Budget, cfg *pipeline.Config) budgetJSON {
	out := budgetJSON{T: rfc3339(b.T), Scan: b.Scan, Outputs: make([]budgetOutputJSON, len(b.Outputs))}
	for i := range b.Outputs {
		o, info := &b.Outputs[i], b.Outputs[i].Quantity.Info()
		to := budgetOutputJSON{
			Quantity: info.Name, Unit: info.Unit, Value: nullable(o.Value), U95: nullable(o.U95), Low95: nullable(o.Low), High95: nullable(o.High),
			Systematic: nullable(o.Systematic), Random: nullable(o.Random), Inputs: []budgetInputJSON{},
		}
		for _, in := range o.Inputs {
			view := budgetInputJSON{Input: in.Name, Contribution: nullable(in.Contribution), Share: nullable(in.Share), Parts: []budgetPartJSON{}}
			for _, part := range in.Parts {
				p := budgetPartJSON{What: part.What, Share: nullable(part.Share)}
				if part.Channel >= 0 {
					ch := &cfg.Compute.Channels[part.Channel]
					p.Channel, p.What = &ch.ID, ch.Title
				}
				view.Parts = append(view.Parts, p)
			}
			to.Inputs = append(to.Inputs, view)
		}
		out.Outputs[i] = to
	}
	return out
}
