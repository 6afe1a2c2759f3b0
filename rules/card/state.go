package card

import (
	"errors"
	"fmt"
	"reflect"
	"slices"

	"throatwatch/rules"
)

// Status of a point of the card, and of one that was taken.
const (
	Open     = "open" // to be taken, or to be taken again
	IsTaken  = "taken"
	Accepted = "accepted"
	Rejected = "rejected" // of a taken one only
	Skipped  = "skipped"  // of a point of the card only
)

// State is the card in force and all that was done by it. It is plain data; the zero
// value has no card.
type State struct {
	Card
	Text     string     `json:"-"`    // of its file
	Hash     string     `json:"hash"` // hex SHA-256 of Text
	Loaded   rules.Time `json:"loaded"`
	LoadedBy string     `json:"loaded_by"`
	Unfit    string     `json:"unfit"` // why the rig as it is now cannot follow it; "" = it can
	Progress []Progress `json:"progress"`
	At       int        `json:"current"` // index of the point that is next, −1 = none
	Now      Now        `json:"now,omitzero"`
	Taken    []Taken    `json:"taken"`

	Loads   uint64    `json:"-"` // cards ever loaded
	Last    uint64    `json:"-"` // number of the last point taken, over the life of the data folder
	Average Averaging `json:"-"`
	OutAt   int64     `json:"-"` // event time since when a target is left or a channel is not good, 0 = not
	Reached bool      `json:"-"` // the point was reached, so that what it expects of the throat holds
}

// Progress is how far a point of the card is.
type Progress struct {
	Status  string   `json:"status"`
	Numbers []uint64 `json:"numbers"` // of what was taken of it
	Reason  string   `json:"reason"`  // of a skip
	By      string   `json:"by"`
}

// Averaging is a point that is being taken.
type Averaging struct {
	On     bool
	From   int64 // event time, ns: inclusive
	To     int64 // exclusive
	Auto   bool
	By     string
	Doubts []string
}

// Taken is a numbered point as it was taken.
type Taken struct {
	Number   uint64     `json:"number"`
	Point    int        `json:"point"` // index on its card
	Name     string     `json:"name"`
	Card     string     `json:"card"` // number and revision
	Run      string     `json:"run"`
	From     rules.Time `json:"from"` // inclusive
	To       rules.Time `json:"to"`   // exclusive
	Scans    int        `json:"scans"`
	Steady   float64    `json:"steady"` // part of the scans that were steady
	Auto     bool       `json:"automatic"`
	Status   string     `json:"status"`
	By       string     `json:"by"`
	JudgedBy string     `json:"judged_by"`
	Judged   rules.Time `json:"judged"` // host time
	Reason   string     `json:"reason"`
	Doubts   []string   `json:"doubts"`
	Values   []Value    `json:"values,omitempty"`
}

// Value is a quantity of a point: mean, standard uncertainties of Type A and B, both
// combined to 95 %, coverage factor, effective sample size, standard deviation.
type Value struct {
	Name  string        `json:"name"`
	Unit  string        `json:"unit"`
	Value rules.Reading `json:"value"`
	TypeA rules.Reading `json:"type_a"`
	TypeB rules.Reading `json:"type_b"`
	U95   rules.Reading `json:"u95"`
	K     rules.Reading `json:"coverage_factor"`
	NEff  rules.Reading `json:"effective_samples"`
	SD    rules.Reading `json:"standard_deviation"`
}

// Errors of what people do with a card.
var (
	ErrNone      = errors.New("no test card is in force")
	ErrDone      = errors.New("no point of the card is open")
	ErrAveraging = errors.New("a point is being averaged")
	ErrNoPoint   = errors.New("the card has no such point")
	ErrNoNumber  = errors.New("no point of this number was taken, or too long ago")
	ErrJudged    = errors.New("it is so already")
	ErrReason    = errors.New("a reason is needed")
)

// On tells whether a card is in force.
func (s *State) On() bool { return len(s.Points) > 0 }

// Current gives the point that is next, nil for none.
func (s *State) Current() *Point {
	if s.At < 0 || s.At >= len(s.Points) {
		return nil
	}
	return &s.Points[s.At]
}

// Shown gives the state as it is shown: nothing of it is null where a list is due. What is
// told again and again leaves the values of what was taken out.
func (s *State) Shown(values bool) State {
	out := *s
	out.Points = make([]Point, len(s.Points))
	for i := range s.Points {
		out.Points[i] = s.Points[i]
		out.Points[i].Needs = append([]Need{}, s.Points[i].Needs...)
	}
	out.Progress = make([]Progress, len(s.Progress))
	for i := range s.Progress {
		out.Progress[i] = s.Progress[i]
		out.Progress[i].Numbers = append([]uint64{}, s.Progress[i].Numbers...)
	}
	out.Taken = make([]Taken, len(s.Taken))
	for i := range s.Taken {
		out.Taken[i] = s.Taken[i]
		out.Taken[i].Doubts = append([]string{}, s.Taken[i].Doubts...)
		if !values {
			out.Taken[i].Values = nil
		}
	}
	out.Now.Targets = append([]TargetNow{}, s.Now.Targets...)
	return out
}

// Stored gives what is stored of each change: without values, and without how the engine
// stood.
func (s *State) Stored() State {
	out := s.Shown(false)
	out.Now = Now{}
	return out
}

// Load puts a card into force in place of the one that is, at host time t in ns. Points
// that are the same on both keep what was done for them. What is being averaged is
// broken off.
func (s *State) Load(c Card, text, hash, by string, t int64) {
	old := *s
	*s = State{
		Card: c, Text: text, Hash: hash, Loaded: rules.Time(t), LoadedBy: by,
		Progress: make([]Progress, len(c.Points)), Taken: old.Taken, Loads: old.Loads + 1, Last: old.Last,
	}
	for i := range c.Points {
		s.Progress[i] = Progress{Status: Open, Numbers: []uint64{}}
		for k := range old.Points {
			if k < len(old.Progress) && c.Number == old.Number && reflect.DeepEqual(c.Points[i], old.Points[k]) {
				s.Progress[i] = old.Progress[k]
			}
		}
	}
	if s.Taken == nil {
		s.Taken = []Taken{}
	}
	s.goTo(s.nextOpen(0))
}

// nextOpen gives the first open point from index from on, else the first of all, −1
// where none is open.
func (s *State) nextOpen(from int) int {
	open := func(p Progress) bool { return p.Status == Open }
	if i := slices.IndexFunc(s.Progress[min(from, len(s.Progress)):], open); i >= 0 {
		return from + i
	}
	return slices.IndexFunc(s.Progress, open)
}

// goTo makes a point the next one.
func (s *State) goTo(i int) {
	s.At, s.Now, s.Average, s.OutAt, s.Reached = i, Now{}, Averaging{}, 0, false
	if i >= 0 {
		s.Now.Targets = make([]TargetNow, len(s.Points[i].Targets))
		s.Now.Why = NoData
	}
}

// mayMove refuses what would move the card on while it has no point, or one is averaged.
func (s *State) mayMove() error {
	switch {
	case !s.On():
		return ErrNone
	case s.Average.On:
		return fmt.Errorf("%w: wait for its end", ErrAveraging)
	}
	return nil
}

// Take begins to average the current point from event time from on, in ns. The engine
// need not be stabilised: what speaks against it is noted with the point. Errors are
// ErrNone, ErrDone, ErrAveraging.
func (s *State) Take(from int64, by, reason string) error {
	if err := s.mayMove(); err != nil {
		return err
	}
	if s.At < 0 {
		return ErrDone
	}
	var doubts []string
	if why := s.Hindrance(); why != "" {
		doubts = append(doubts, "taken though not stabilised: "+why)
		if reason != "" {
			doubts[0] += " (" + reason + ")"
		}
	}
	s.begin(from, by, false, doubts)
	return nil
}

func (s *State) begin(from int64, by string, auto bool, doubts []string) {
	s.Now.Averaging, s.Now.AveragingLeft = true, s.Points[s.At].Average
	s.Average = Averaging{On: true, From: from, To: from + ns(s.Points[s.At].Average), Auto: auto, By: by, Doubts: doubts}
}

// Break ends what is being averaged without a point; it tells whether there was anything.
func (s *State) Break() bool {
	was := s.Average.On
	s.Average, s.Now.Averaging, s.Now.AveragingLeft = Averaging{}, false, 0
	return was
}

// Complete makes a numbered point of what was averaged, and the next open point current.
func (s *State) Complete(run string, scans int, steady float64, values []Value, doubts []string) *Taken {
	a, pt := &s.Average, &s.Points[s.At]
	s.Last++
	t := Taken{
		Number: s.Last, Point: s.At, Name: pt.Name, Card: s.Label(), Run: run, From: rules.Time(a.From), To: rules.Time(a.To),
		Scans: scans, Steady: steady, Auto: a.Auto, Status: IsTaken, By: a.By, Values: values,
		Doubts: append(append([]string{}, a.Doubts...), doubts...),
	}
	if len(s.Taken) == takenKept {
		s.Taken = slices.Delete(s.Taken, 0, 1)
	}
	s.Taken = append(s.Taken, t)
	p := &s.Progress[s.At]
	*p = Progress{Status: IsTaken, Numbers: append(slices.Clip(p.Numbers), t.Number)}
	s.goTo(s.nextOpen(s.At + 1))
	return &s.Taken[len(s.Taken)-1]
}

// Judge accepts or rejects what was taken under a number, at host time t in ns. A point
// whose last one was rejected is open again, and is next unless one is being averaged.
// The errors are ErrNoNumber, ErrJudged, ErrReason of a reject without one.
func (s *State) Judge(number uint64, accept bool, by, reason string, t int64) (*Taken, error) {
	i := slices.IndexFunc(s.Taken, func(t Taken) bool { return t.Number == number })
	status := Rejected
	if accept {
		status = Accepted
	}
	switch {
	case i < 0:
		return nil, ErrNoNumber
	case s.Taken[i].Status == status:
		return nil, fmt.Errorf("%s: %w", status, ErrJudged)
	case !accept && reason == "":
		return nil, fmt.Errorf("to reject a point: %w", ErrReason)
	}
	k := &s.Taken[i]
	k.Status, k.JudgedBy, k.Reason, k.Judged = status, by, reason, rules.Time(t)
	for n := range s.Progress {
		p := &s.Progress[n]
		if !slices.Contains(p.Numbers, number) {
			continue
		}
		s.settle(p)
		switch {
		case s.Average.On:
		case p.Status == Open:
			s.goTo(n)
		case s.At == n && p.Status == Accepted:
			s.goTo(s.nextOpen(n + 1))
		}
	}
	return k, nil
}

// settle makes the status of a point of what was taken of it: accepted if one was, taken
// if one waits to be judged, else open.
func (s *State) settle(p *Progress) {
	p.Status = Open
	for _, t := range s.Taken {
		switch {
		case !slices.Contains(p.Numbers, t.Number):
		case t.Status == Accepted:
			p.Status = Accepted
			return
		case t.Status == IsTaken:
			p.Status = IsTaken
		}
	}
}

// Skip leaves the current point out. The errors are those of Take, and ErrReason.
func (s *State) Skip(by, reason string) error {
	if err := s.mayMove(); err != nil {
		return err
	}
	switch {
	case s.At < 0:
		return ErrDone
	case reason == "":
		return fmt.Errorf("to skip a point: %w", ErrReason)
	}
	p := &s.Progress[s.At]
	p.Status, p.By, p.Reason = Skipped, by, reason
	s.goTo(s.nextOpen(s.At + 1))
	return nil
}

// GoTo makes point i, counted from 0, the current one; a skipped one is open again. One
// that was taken is taken again, under another number. Errors are ErrNone, ErrAveraging,
// ErrNoPoint.
func (s *State) GoTo(i int) error {
	if err := s.mayMove(); err != nil {
		return err
	}
	if i < 0 || i >= len(s.Points) {
		return fmt.Errorf("point %d of %d: %w", i+1, len(s.Points), ErrNoPoint)
	}
	if p := &s.Progress[i]; p.Status == Skipped {
		p.By, p.Reason = "", ""
		s.settle(p)
	}
	s.goTo(i)
	return nil
}

func ns(seconds float64) int64 { return int64(seconds * 1e9) }
