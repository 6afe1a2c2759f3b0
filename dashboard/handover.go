package dashboard

import (
	"encoding/json"
	"fmt"
	"net/http"
	"time"

	"throatwatch/monitor/calib"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// Handover is the sheet with which a watch is handed over: what stands, what is put
// aside, what is open, what is in force.
type Handover struct {
	T      rules.Time       `json:"t"` // host time
	By     string           `json:"by"`
	Rig    pipeline.RigInfo `json:"rig"`
	Run    *runJSON         `json:"run"`
	Alarms struct {
		Standing     []rules.Alarm `json:"standing"`
		Shelved      []rules.Alarm `json:"shelved"`
		OutOfService []rules.Alarm `json:"out_of_service"`
		Suppressed   []rules.Alarm `json:"suppressed"` // by design
	} `json:"alarms"`
	Waivers       []Waiver            `json:"waivers"`
	Card          *OpenCard           `json:"card"`
	Checks        pipeline.ChecksView `json:"checks"`
	LimitsVersion string              `json:"limits_version"`
	Config        pipeline.InForce    `json:"config"`
	Notes         []pipeline.Entry    `json:"notes"` // of the run, or of the time since the last one
}

// Waiver is a sensor whose calibration has expired, with who answers for it.
type Waiver struct {
	Channel string `json:"channel"`
	Serial  string `json:"serial"`
	Due     string `json:"due"`
	State   string `json:"state"` // waived, or expired: nobody answers for it
	Who     string `json:"who"`
	Why     string `json:"why"`
	Until   string `json:"until"`
}

// waivers lists the sensors whose calibration has expired at host time t, ns.
func waivers(cfg *pipeline.Config, t int64) []Waiver {
	list := []Waiver{}
	for i := range cfg.Compute.Channels {
		c := &cfg.Compute.Channels[i]
		r := c.RecordAt(t)
		if state := r.State(t); state == calib.Waived || state == calib.Expired {
			w := Waiver{Channel: c.ID, Serial: r.Serial, Due: r.Due, State: state.String()}
			if state == calib.Waived {
				w.Who, w.Why, w.Until = r.Waiver.Who, r.Waiver.Why, r.Waiver.Until
			}
			list = append(list, w)
		}
	}
	return list
}

// OpenCard is what is left to be done of a test card.
type OpenCard struct {
	Title    string   `json:"title"`
	Number   string   `json:"number"`
	Revision string   `json:"revision"`
	Open     []string `json:"open"`     // names of points
	Skipped  []string `json:"skipped"`  // names of points
	Awaiting []uint64 `json:"awaiting"` // numbers taken, neither accepted nor rejected
}

// handover answers with the hand-over sheet.
func (s *Server) handover(w http.ResponseWriter, r *http.Request) error {
	who := callerOf(r).Name
	if by := r.URL.Query().Get("by"); by != "" {
		if !callerOf(r).open && by != who {
			return badRequest("by %q: the request comes from %q; leave by out", by, who)
		}
		who = by
	}
	var out []byte
	var encoding error
	if err := s.ask(r.Context(), r.PathValue("rig"), func(cfg *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		out, encoding = json.Marshal(handoverOf(cfg, m, st, who))
	}); err != nil {
		return err
	}
	if encoding != nil {
		return fmt.Errorf("hand-over sheet: %w", encoding)
	}
	return replyJSON(w, http.StatusOK, out)
}

func handoverOf(cfg *pipeline.Config, m *pipeline.Machine, st *pipeline.State, by string) Handover {
	h := Handover{T: rules.Time(st.Host), By: by, Rig: cfg.Rig, Waivers: waivers(cfg, st.Host), Card: openCard(&st.Card), Checks: m.Checks(st), LimitsVersion: cfg.Rig.LimitsVersion, Config: st.InForce, Notes: []pipeline.Entry{}}
	a := &h.Alarms
	a.Standing, a.Shelved, a.OutOfService, a.Suppressed = []rules.Alarm{}, []rules.Alarm{}, []rules.Alarm{}, []rules.Alarm{}
	for _, one := range m.Alarms(st) {
		to := &a.Standing
		if state := alarm.State(one.State); state == alarm.Shelved {
			to = &a.Shelved
		} else if state == alarm.OutOfService {
			to = &a.OutOfService
		} else if state == alarm.SuppressedByDesign {
			to = &a.Suppressed
		}
		*to = append(*to, one)
	}
	since := st.Run.Ended
	if st.RunActive {
		run := runView(&st.Run)
		h.Run, since = &run, st.Run.Started
	}
	for _, e := range st.Log {
		if int64(e.T) >= since-int64(time.Minute) { // host time of an entry may be behind event time
			h.Notes = append(h.Notes, e)
		}
	}
	return h
}

func openCard(s *card.State) *OpenCard {
	if !s.On() {
		return nil
	}
	o := &OpenCard{Title: s.Title, Number: s.Number, Revision: s.Revision, Open: []string{}, Skipped: []string{}, Awaiting: []uint64{}}
	for i, p := range s.Progress {
		switch p.Status {
		case card.Open:
			o.Open = append(o.Open, s.Points[i].Name)
		case card.Skipped:
			o.Skipped = append(o.Skipped, s.Points[i].Name)
		default:
		}
	}
	for _, t := range s.Taken {
		if t.Status == card.IsTaken {
			o.Awaiting = append(o.Awaiting, t.Number)
		}
	}
	return o
}
