package pipeline

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/steady"
	"throatwatch/rules"
	"throatwatch/rules/card"
)

// What became of a test card: Outcome.Event of OutcomeCard. It is "" for what is told
// each second, which is not stored.
const (
	CardLoaded  = "loaded"
	CardStands  = "stands" // a run begins with it
	CardMoved   = "moved"  // another point is next
	CardBegan   = "averaging"
	CardBroken  = "broken_off"
	CardChanged = "changed" // a point was taken, accepted, rejected or skipped
)

// ErrCard is returned for a test card that this rig cannot follow; wrapped with why.
var ErrCard = errors.New("the test card does not fit this rig")

// cardPlan is the card of a state, resolved for a program.
type cardPlan struct {
	plan  *card.Plan // nil = there is no card, or it does not fit
	of    *program
	loads uint64
}

// channelIDs gives the ids of the channels, in order.
func (c *Config) channelIDs() []string {
	ids := make([]string, len(c.Compute.Channels))
	for i := range ids {
		ids[i] = c.Compute.Channels[i].ID
	}
	return ids
}

// FitsCard tells whether a rig can follow a card: nil, or an error that wraps ErrCard.
func (c *Config) FitsCard(k *card.Card) error {
	if k.For != "" && k.For != c.Rig.EngineSerial {
		return fmt.Errorf("%w: it is for engine %s, and this is %s", ErrCard, k.For, c.Rig.EngineSerial)
	}
	if _, err := card.NewPlan(k, c.channelIDs()); err != nil {
		return fmt.Errorf("%w: %w", ErrCard, err)
	}
	for i := range k.Points {
		if least := float64(leastBins*c.Align.Period) / 1e9; k.Points[i].Average < least {
			return fmt.Errorf("%w: point %d, %q: averaging over %g s, %g s at least", ErrCard, i+1, k.Points[i].Name, k.Points[i].Average, least)
		}
	}
	return nil
}

// plan gives the card of the state for the program in force.
func (m *Machine) plan(s *State) *card.Plan {
	c := &m.card
	if c.of == m.prog && c.loads == s.Card.Loads {
		return c.plan
	}
	*c = cardPlan{of: m.prog, loads: s.Card.Loads}
	s.Card.Unfit = ""
	if !s.Card.On() {
		return nil
	}
	if err := m.prog.cfg.FitsCard(&s.Card.Card); err != nil {
		s.Card.Unfit = err.Error()
		return nil
	}
	c.plan, _ = card.NewPlan(&s.Card.Card, m.prog.cfg.channelIDs()) // it was made just now
	return c.plan
}

// followCard steps the card through a scan, before anything is told of the scan: it may
// say that the throat is expected choked.
func (m *Machine) followCard(s *State, scan *monitor.Scan, p *monitor.OperatingPoint) card.Change {
	plan := m.plan(s)
	if plan == nil {
		return 0
	}
	in := card.Input{Scan: scan, Point: p, Run: s.RunActive}
	in.Unsteady, in.Slope = m.prog.compute.Unsteady(&s.Compute)
	change := plan.Step(&s.Card, &in)
	switch s.Card.Choke() {
	case card.Armed:
		p.ChokeArmed, p.ArmedBy = true, monitor.ByCard
	case card.Disarmed:
		p.ChokeArmed, p.ArmedBy = false, monitor.ByCard
	}
	return change
}

// tellCard averages, and tells what became of the card in a scan.
func (m *Machine) tellCard(s *State, scan *monitor.Scan, p *monitor.OperatingPoint, change card.Change) {
	if !s.Card.On() {
		return
	}
	k := &s.Card
	switch {
	case change&card.Complete != 0:
		m.completeCard(s, scan.T)
		return
	case change&card.Broke != 0:
		s.Gathering = gathering{}
		m.emitCard(s, scan.T, CardBroken)
		return
	case change&card.Began != 0:
		s.Gathering = newGathering(&m.prog.cfg, k.Average.From, k.Average.To)
		m.emitCard(s, scan.T, CardBegan)
	case scan.N%uint64(max(1, second/m.prog.cfg.Align.Period)) == 0:
		m.emitCard(s, scan.T, "")
	}
	if k.Averages(scan.T) {
		s.Gathering.add(scan, p)
	}
}

// completeCard makes a numbered point of what was averaged.
func (m *Machine) completeCard(s *State, t int64) {
	tp, err := s.Gathering.reduce(&m.prog.cfg)
	doubts := m.pointDoubts(s, &tp)
	if err != nil {
		doubts = append(doubts, err.Error())
	}
	var values []card.Value
	for _, q := range PointQuantities() {
		if v := &tp.Values[q]; v.N > 0 {
			values = append(values, cardValue(q, v))
		}
	}
	s.Gathering = gathering{}
	taken := s.Card.Complete(s.Run.ID, tp.Scans, tp.Steady, values, doubts)
	m.emitTaken(s, t, taken)
	m.emitCard(s, t, CardChanged)
}

// pointDoubts says what is doubtful of the current point by its means.
func (m *Machine) pointDoubts(s *State, tp *TestPoint) (list []string) {
	if tp.Scans > 0 && tp.Steady < 1 {
		list = append(list, fmt.Sprintf("steady in %d %% of the scans", int(100*tp.Steady)))
	}
	if whole := (tp.To - tp.From) / m.prog.cfg.Align.Period; int64(tp.Scans) < whole*99/100 {
		list = append(list, fmt.Sprintf("%d of %d scans are missing", whole-int64(tp.Scans), whole))
	}
	for _, t := range s.Card.Current().Targets {
		q, ok := monitor.ParseQuantity(t.Quantity)
		if !ok {
			continue
		}
		mean := tp.Values[q].Mean
		if !(!t.Low.Known || mean >= t.Low.V) || !(!t.High.Known || mean <= t.High.V) {
			list = append(list, fmt.Sprintf("the mean of %s, %.6g %s, is not at %s", t.Quantity, mean, t.Unit, t.Text))
		}
	}
	return list
}

func cardValue(q monitor.Quantity, v *steady.Value) card.Value {
	known := monitor.ReadingOf
	info := q.Info()
	return card.Value{
		Name: info.Name, Unit: info.Unit, Value: known(v.Mean), TypeA: known(v.TypeA.U), TypeB: known(v.TypeB.U),
		U95: known(v.U95), K: known(v.K), NEff: known(v.NEff), SD: known(v.SD),
	}
}

// PointQuantities are the quantities of a test point, in the order of the tables.
func PointQuantities() []monitor.Quantity {
	return []monitor.Quantity{
		monitor.NPR, monitor.ChokeMarginPercent, monitor.RakePressure, monitor.TotalTemperature, monitor.BackPressure, monitor.Barometer,
		monitor.MassFlow, monitor.AirFlow, monitor.FuelFlow, monitor.WaterFlow, monitor.BleedFlow, monitor.IndependentFlow,
		monitor.FlowBalance, monitor.EffectiveArea, monitor.GrossThrust, monitor.MeasuredThrust, monitor.Speed, monitor.EGTIndicated,
		monitor.EGTSpread, monitor.ReferredFlow, monitor.ReferredSpeed, monitor.ReferredThrust, monitor.ReferredEGT,
	}
}

func (m *Machine) emitCard(s *State, t int64, event string) {
	m.emit(s, Outcome{Kind: OutcomeCard, T: t, Event: event, Card: &s.Card})
}

func (m *Machine) emitTaken(s *State, t int64, k *card.Taken) {
	taken := *k
	m.emit(s, Outcome{Kind: OutcomeCardPoint, T: t, Taken: &taken})
}

// breakCard ends what is being averaged when the run does.
func (m *Machine) breakCard(s *State, t int64) {
	if s.Card.Break() {
		s.Gathering = gathering{}
		m.emitCard(s, t, CardBroken)
	}
}

// cardAction does what a person asks for on the test card.
func (m *Machine) cardAction(s *State, t int64, a *Action) error {
	engineer := a.Role == "engineer" || a.Role == "facility"
	a.Reason = strings.TrimSpace(a.Reason)
	k, do := &s.Card, strings.ReplaceAll(a.Do, "-", "_")
	if do != DoCardLoad && m.plan(s) == nil {
		if k.Unfit != "" {
			return errors.New(k.Unfit)
		}
		return card.ErrNone
	}
	e := Entry{Name: k.Label()}
	event := CardChanged
	switch do {
	case DoCardLoad:
		switch {
		case !engineer:
			return fmt.Errorf("%w: a test card is loaded by an engineer", rules.ErrRefused)
		case a.Card == nil:
			return invalid("the action has no card")
		}
		if err := m.prog.cfg.FitsCard(a.Card); err != nil {
			return err
		}
		m.breakCard(s, t)
		k.Load(*a.Card, a.CardText, a.CardHash, a.By, s.Host)
		event = CardLoaded
		e.Name, e.Text = k.Label(), fmt.Sprintf("%s: %d points", k.Title, len(k.Points))
	case DoTake:
		if !s.RunActive {
			return ErrNoRun
		}
		if err := k.Take(s.Align.Next, a.By, a.Reason); err != nil {
			return err
		}
		s.Gathering = newGathering(&m.prog.cfg, k.Average.From, k.Average.To)
		event = CardBegan
		e.Text = k.Current().Name
	case DoAccept, DoReject:
		if !engineer {
			return fmt.Errorf("%w: a point is accepted or rejected by an engineer", rules.ErrRefused)
		}
		taken, err := k.Judge(a.Number, do == DoAccept, a.By, a.Reason, s.Host)
		if err != nil {
			return fmt.Errorf("point %d: %w", a.Number, err)
		}
		m.emitTaken(s, t, taken)
		e.Name, e.Text = taken.Card, fmt.Sprintf("point %d, %s", a.Number, taken.Name)
	case DoSkip:
		name := ""
		if pt := k.Current(); pt != nil {
			name = pt.Name
		}
		if err := k.Skip(a.By, a.Reason); err != nil {
			return err
		}
		e.Text = name
	case DoGoToPoint:
		if err := k.GoTo(a.Point - 1); err != nil {
			return err
		}
		event = CardMoved
		e.Text = k.Current().Name
	}
	m.log(s, a, e)
	m.emitCard(s, t, event)
	return nil
}

// isCardAction tells whether an action is one on the test card.
func isCardAction(do string) bool {
	return slices.Contains([]string{DoCardLoad, DoTake, DoAccept, DoReject, DoSkip, DoGoToPoint}, strings.ReplaceAll(do, "-", "_"))
}
