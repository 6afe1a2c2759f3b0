package dashboard

import (
	"encoding/json"
	"fmt"
	"net/http"
	"strings"

	"throatwatch/dashboard/points"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// cardView gives what is shown of a card: nil where none is in force.
func cardView(s *card.State) *card.State {
	if !s.On() {
		return nil
	}
	shown := s.Shown(true)
	return &shown
}

// cardJSON is the card in force.
type cardJSON struct {
	Card *card.State `json:"card"`
}

func (s *Server) card(w http.ResponseWriter, r *http.Request) error {
	var out []byte
	var encoding error
	if err := s.ask(r.Context(), r.PathValue("rig"), func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		out, encoding = json.Marshal(cardJSON{cardView(&st.Card)})
	}); err != nil {
		return err
	}
	if encoding != nil {
		return fmt.Errorf("test card: %w", encoding)
	}
	return replyJSON(w, http.StatusOK, out)
}

// runCard answers with the test card of a stored run.
func (s *Server) runCard(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	c, err := points.ReadCard(r.Context(), f, &run.Header)
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, c)
}

// cardLoadBody is the body that loads a test card.
type cardLoadBody struct {
	Text      string `json:"text"` // of its file
	Reason    string `json:"reason"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

func (s *Server) loadCard(w http.ResponseWriter, r *http.Request) error {
	var in cardLoadBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	var cfg pipeline.Config
	if err := s.ask(r.Context(), r.PathValue("rig"), func(c *pipeline.Config, _ *pipeline.Machine, _ *pipeline.State) { cfg = *c }); err != nil {
		return err
	}
	if s.cfg.ParseCard == nil {
		return notFound("no test card can be loaded here")
	}
	c, hash, faults := s.cfg.ParseCard(in.Text, &cfg)
	if len(faults) > 0 {
		return &faulty{problem{http.StatusUnprocessableEntity, "the test card has faults; what was in force stays"}, faults}
	}
	return s.act(w, r, pipeline.Action{
		Do: pipeline.DoCardLoad, Card: &c, CardText: in.Text, CardHash: hash, Reason: in.Reason, By: in.By, RequestID: in.RequestID,
	})
}

// cardBody is the body of what is done on the test card.
type cardBody struct {
	Point     int    `json:"point"`  // of the card, counted from 1
	Number    uint64 `json:"number"` // of a point that was taken
	Reason    string `json:"reason"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

func (s *Server) cardAction(w http.ResponseWriter, r *http.Request) error {
	var in cardBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	a := pipeline.Action{Point: in.Point, Number: in.Number, Reason: in.Reason, By: in.By, RequestID: in.RequestID}
	switch r.PathValue("action") {
	case "take":
		a.Do = pipeline.DoTake
	case "accept":
		a.Do = pipeline.DoAccept
	case "reject":
		a.Do = pipeline.DoReject
	case "skip":
		a.Do = pipeline.DoSkip
	case "go-to":
		a.Do = pipeline.DoGoToPoint
	default:
		return notFound("no action %q on a test card: take, accept, reject, skip, go-to", r.PathValue("action"))
	}
	hindrance := ""
	if err := s.ask(r.Context(), r.PathValue("rig"), func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		if a.Do == pipeline.DoTake && st.RunActive && st.Card.Current() != nil && !st.Card.Average.On {
			hindrance = st.Card.Hindrance()
		}
	}); err != nil {
		return err
	}
	// It is asked here, not in the step: a run that is stepped again by other calibrations
	// keeps the points that were taken.
	if hindrance != "" && strings.TrimSpace(in.Reason) == "" {
		return &problem{http.StatusConflict, "not stabilised: " + hindrance + ". Give a reason to take the point all the same"}
	}
	return s.act(w, r, a)
}
