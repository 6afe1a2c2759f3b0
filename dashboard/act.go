package dashboard

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"strings"

	"throatwatch/rules"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// largestBody bounds the body of a request, bytes.
const largestBody = 64 << 10

// alarmBody is the body of an action on an alarm.
type alarmBody struct {
	Revision  uint64  `json:"revision"` // that the operator saw
	Reason    string  `json:"reason"`
	RequestID string  `json:"request_id"`
	By        string  `json:"by"`
	Seconds   float64 `json:"seconds"` // of shelving
}

// runBody is the body that starts or ends a run.
type runBody struct {
	Action    string `json:"action"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

// markBody is the body of a mark.
type markBody struct {
	Text      string `json:"text"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

// entryBody is the body of a manual entry.
type entryBody struct {
	Name      string        `json:"name"`
	Value     rules.Reading `json:"value"`
	Unit      string        `json:"unit"`
	Text      string        `json:"text"`
	RequestID string        `json:"request_id"`
	By        string        `json:"by"`
}

// swapBody is the body that tells of another sensor.
type swapBody struct {
	Channel   string     `json:"channel"`
	Serial    string     `json:"serial"`
	ValidFrom rules.Time `json:"valid_from"`
	// As a rig file states it: keys calibration, uncertainty and sensor; "" = not stated.
	Calibration string `json:"calibration"`

	Reason    string `json:"reason"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

// readmitBody is the body that takes an excluded probe back.
type readmitBody struct {
	Channel   string `json:"channel"`
	Reason    string `json:"reason"`
	RequestID string `json:"request_id"`
	By        string `json:"by"`
}

// command reads the JSON body of a request that changes something. v is what it
// is decoded into.
func command(w http.ResponseWriter, r *http.Request, v any) error {
	if err := sameSite(r); err != nil {
		return err
	}
	dec := json.NewDecoder(http.MaxBytesReader(w, r.Body, largestBody))
	dec.DisallowUnknownFields()
	err := dec.Decode(v)
	if err == nil {
		if _, more := dec.Token(); !errors.Is(more, io.EOF) {
			err = errors.New("something follows the JSON object")
		}
	}
	var large *http.MaxBytesError
	switch {
	case errors.As(err, &large):
		return &problem{http.StatusRequestEntityTooLarge, fmt.Sprintf("body: more than %d bytes", large.Limit)}
	case errors.Is(err, io.EOF):
		return badRequest("body: a JSON object is needed")
	case err != nil:
		return badRequest("body: %v", err)
	}
	return nil
}

// sameSite refuses a request that a page of another site makes a browser send.
func sameSite(r *http.Request) error {
	if site := r.Header.Get("Sec-Fetch-Site"); site != "" && site != "same-origin" && site != "none" {
		return &problem{http.StatusForbidden, "the request comes from another site"}
	}
	if origin := r.Header.Get("Origin"); origin != "" && origin != "http://"+r.Host && origin != "https://"+r.Host {
		return &problem{http.StatusForbidden, "the request comes from another site: " + origin}
	}
	return nil
}

// doing gives for the last part of the path what the rules call it.
func doing(path string) (do string, ok bool) {
	switch path {
	case "acknowledge":
		return rules.DoAcknowledge, true
	case "shelve":
		return rules.DoShelve, true
	case "unshelve":
		return rules.DoUnshelve, true
	case "reset":
		return rules.DoReset, true
	case "out-of-service":
		return rules.DoOutOfService, true
	case "in-service":
		return rules.DoInService, true
	}
	return "", false
}

func (s *Server) alarmAction(w http.ResponseWriter, r *http.Request) error {
	do, ok := doing(r.PathValue("action"))
	if !ok {
		return notFound("no action %q on an alarm: acknowledge, shelve, unshelve, reset, out-of-service, in-service", r.PathValue("action"))
	}
	var in alarmBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if in.RequestID == "" {
		return badRequest("request_id is missing: give each request an id of its own, so that a repeated one is done once")
	}
	return s.act(w, r, pipeline.Action{
		Do: do, Alarm: r.PathValue("id"), Revision: in.Revision, Reason: in.Reason, Seconds: in.Seconds, By: in.By, RequestID: in.RequestID,
	})
}

func (s *Server) startOrEndRun(w http.ResponseWriter, r *http.Request) error {
	var in runBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	a := pipeline.Action{By: in.By, RequestID: in.RequestID}
	switch in.Action {
	case "start":
		a.Do = pipeline.DoRunStart
	case "end":
		a.Do = pipeline.DoRunEnd
	default:
		return badRequest(`action %q: give "start" or "end"`, in.Action)
	}
	if err := s.ask(r.Context(), r.PathValue("rig"), func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	return s.act(w, r, a)
}

func (s *Server) readmit(w http.ResponseWriter, r *http.Request) error {
	var in readmitBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if err := s.ask(r.Context(), r.PathValue("rig"), func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	return s.act(w, r, pipeline.Action{Do: pipeline.DoReadmit, Channel: in.Channel, Reason: in.Reason, By: in.By, RequestID: in.RequestID})
}

func (s *Server) mark(w http.ResponseWriter, r *http.Request) error {
	var in markBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if strings.TrimSpace(in.Text) == "" {
		return badRequest("a mark needs a text")
	}
	if err := s.isOn(r, "marks can be set"); err != nil {
		return err
	}
	return s.act(w, r, pipeline.Action{Do: pipeline.DoMark, Text: in.Text, By: in.By, RequestID: in.RequestID})
}

// isOn refuses what can be done on the run that is on only, if that of the path is not.
func (s *Server) isOn(r *http.Request, what string) error {
	id, active := r.PathValue("id"), ""
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		if st.RunActive {
			active = st.Run.ID
		}
	}); err != nil {
		return err
	}
	if id != active {
		return &problem{http.StatusConflict, fmt.Sprintf("run %q is not on: %s on the run that is", id, what)}
	}
	return nil
}

func (s *Server) entry(w http.ResponseWriter, r *http.Request) error {
	var in entryBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if err := s.isOn(r, "entries can be made"); err != nil {
		return err
	}
	return s.act(w, r, pipeline.Action{
		Do: pipeline.DoEntry, Name: in.Name, Value: in.Value, Unit: in.Unit, Text: in.Text, By: in.By, RequestID: in.RequestID,
	})
}

func (s *Server) swap(w http.ResponseWriter, r *http.Request) error {
	var in swapBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	var bundle []byte
	if err := s.ask(r.Context(), r.PathValue("rig"), func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		bundle = bytes.Clone(st.Bundle)
	}); err != nil {
		return err
	}
	if in.Calibration != "" && s.cfg.CheckSwap != nil {
		if faults := s.cfg.CheckSwap(bundle, in.Channel, in.Serial, in.Calibration); len(faults) > 0 {
			return &faulty{problem{http.StatusUnprocessableEntity, "the calibration of the new sensor has faults"}, faults}
		}
	}
	return s.act(w, r, pipeline.Action{
		Do: pipeline.DoSwap, Channel: in.Channel, Serial: in.Serial, ValidFrom: in.ValidFrom, Reason: in.Reason, By: in.By, RequestID: in.RequestID,
		Calibration: in.Calibration,
	})
}

// configBody is the body that takes files into force.
type configBody struct {
	By         string `json:"by"`
	ApprovedBy string `json:"approved_by"`
	Reason     string `json:"reason"`
	RequestID  string `json:"request_id"`
}

// reload takes the rig and rule files as they are now into force.
func (s *Server) reload(w http.ResponseWriter, r *http.Request) error {
	var in configBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if err := s.ask(r.Context(), r.PathValue("rig"), func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	if s.cfg.Reload == nil {
		return notFound("this watch has no rig file to read again")
	}
	who, err := s.actor(r, in.By)
	if err != nil {
		return err
	}
	if callerOf(r).open {
		who.Name = in.By // without one, who the files name
	}
	res, faults, err := s.cfg.Reload(r.Context(), pipeline.Action{
		By: who.Name, Role: who.Role.String(), ApprovedBy: in.ApprovedBy, Reason: in.Reason, RequestID: in.RequestID,
	})
	switch {
	case err != nil:
		return silent(err)
	case len(faults) > 0:
		return &faulty{problem{http.StatusUnprocessableEntity, "the files have faults; what was in force stays"}, faults}
	case errors.Is(res.Err, pipeline.ErrSamePerson):
		return badRequest("%v", res.Err)
	case res.Err != nil:
		return &problem{http.StatusConflict, res.Err.Error()}
	}
	return reply(w, http.StatusAccepted, placeJSON{res.Epoch, res.N})
}

// placeJSON is where among the outcomes something came about.
type placeJSON struct {
	Epoch uint64 `json:"epoch"`
	N     uint64 `json:"n"`
}

// act does an operator's action and says what became of it.
func (s *Server) act(w http.ResponseWriter, r *http.Request, a pipeline.Action) error {
	who, err := s.actor(r, a.By)
	if err != nil {
		return err
	}
	a.By, a.Role = who.Name, who.Role.String()
	res, err := s.cfg.Desk.Act(r.Context(), a)
	switch {
	case err != nil:
		return silent(err)
	case errors.Is(res.Err, pipeline.ErrInvalid), errors.Is(res.Err, card.ErrReason):
		return badRequest("%v", res.Err)
	case errors.Is(res.Err, rules.ErrNotFound), errors.Is(res.Err, pipeline.ErrNoChannel),
		errors.Is(res.Err, card.ErrNoNumber), errors.Is(res.Err, card.ErrNoPoint):
		return notFound("%v", res.Err)
	case res.Err != nil:
		return &problem{http.StatusConflict, res.Err.Error()}
	}
	return reply(w, http.StatusAccepted, placeJSON{res.Epoch, res.N})
}
