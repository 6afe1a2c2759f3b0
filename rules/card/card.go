// Package card follows a test card: the ordered points that an engineer wants taken,
// how far the engine is from the one that is next, whether it is stabilised there and
// if not why, and which numbered points were taken, accepted, rejected.
//
// A card is data: whoever reads its file gives it here with every value in the unit
// that the quantity has in an operating point. State is plain data, and Step reads only
// it, the plan and the scan, so that a replay follows the same card in the same way. A
// card is never edited: another one takes its place, and what was taken stays as it was.
// Numbers of points go up by one and are never used again.
package card

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/rules"
)

const (
	// MostPoints bounds the points of a card.
	MostPoints = 100
	// MostTargets bounds the targets of a point, and the things that must be good for it.
	MostTargets = 12
	// MostText bounds the text of a card, bytes.
	MostText = 48 << 10
	// longest is the longest soak and average, s.
	longest = 86400
	// takenKept is how many points that were taken the state holds, for those who begin
	// to look; all of them are in the run files.
	takenKept = 40
)

// Choke expectation of a point: Point.Choke.
const (
	Armed    = "armed"    // the throat is expected choked there, so that its loss is an alarm
	Disarmed = "disarmed" // it is not, whatever the speed says
)

// Card is a test card. The zero value is none.
type Card struct {
	Title    string  `json:"title"`
	Number   string  `json:"number"`
	Revision string  `json:"revision"`
	By       string  `json:"by"`  // the engineer who made it
	For      string  `json:"for"` // serial number of the engine; "" = any
	Points   []Point `json:"points"`
}

// Label names the card in a line.
func (c *Card) Label() string { return strings.TrimSpace(c.Number + " " + c.Revision) }

// Point is a condition to be taken.
type Point struct {
	Name    string   `json:"name"`
	Targets []Target `json:"targets"`
	Soak    float64  `json:"soak_s"`    // for which the targets have to be held before
	Average float64  `json:"average_s"` // over which is averaged
	Auto    bool     `json:"automatic"` // it is taken as soon as the engine is stabilised
	Needs   []Need   `json:"good"`
	Choke   string   `json:"expect_choke"` // Armed, Disarmed, or "": the speed rule decides
}

// Target says where a quantity has to be: Value ± Tolerance, or above Low, below High.
type Target struct {
	Quantity  string        `json:"quantity"` // key of a monitor.Quantity, or channel.<id>
	Title     string        `json:"title"`
	Unit      string        `json:"unit"` // of the numbers below
	Text      string        `json:"text"` // as the card has it
	Value     rules.Reading `json:"target"`
	Tolerance rules.Reading `json:"tolerance"`
	Low       rules.Reading `json:"low"`
	High      rules.Reading `json:"high"`
}

// Need is a channel, or the probes of a station, that must be good: at least Least of
// the channels have to be usable.
type Need struct {
	Name     string   `json:"name"`
	Channels []string `json:"channels"`
	Least    int      `json:"at_least"`
}

// Errors of a plan.
var (
	// ErrUnknown is returned for a quantity or channel that the rig has not.
	ErrUnknown = errors.New("the rig has not got it")
	// ErrCard is returned for a card that cannot be followed; it is wrapped with why.
	ErrCard = errors.New("cannot be followed")
)

// Plan is a card with its names resolved for a rig.
type Plan struct {
	points []planned
}

type planned struct {
	targets []source
	needs   [][]int // channels of each need
}

// source says where the value of a target is.
type source struct {
	quantity monitor.Quantity
	channel  int  // index, −1 = quantity
	setting  bool // something that is set: it does not say itself whether the throat is choked
}

// sayChoked are the quantities that say themselves whether the throat is choked.
var sayChoked = []monitor.Quantity{
	monitor.ChokeMarginPercent, monitor.ChokeMarginPercentLow95, monitor.ChokeMarginPa, monitor.PChoked, monitor.ThroatMach,
}

// NewPlan resolves the names of a card; channels are the ids of the rig's, in order. The
// error wraps ErrUnknown or ErrCard and says what is wrong with which point.
func NewPlan(c *Card, channels []string) (*Plan, error) {
	if len(c.Points) == 0 || len(c.Points) > MostPoints {
		return nil, fmt.Errorf("a card of %d points, 1 to %d can be: %w", len(c.Points), MostPoints, ErrCard)
	}
	p := &Plan{points: make([]planned, len(c.Points))}
	for i := range c.Points {
		if err := p.points[i].resolve(&c.Points[i], channels); err != nil {
			return nil, fmt.Errorf("point %d, %q: %w", i+1, c.Points[i].Name, err)
		}
	}
	return p, nil
}

func (d *planned) resolve(pt *Point, channels []string) error {
	switch {
	case len(pt.Targets) == 0 || len(pt.Targets) > MostTargets || len(pt.Needs) > MostTargets:
		return fmt.Errorf("%d targets and %d things that must be good, 1 to %d and %d at most can be: %w", len(pt.Targets), len(pt.Needs), MostTargets, MostTargets, ErrCard)
	case !(pt.Soak >= 0 && pt.Soak <= longest && pt.Average > 0 && pt.Average <= longest):
		return fmt.Errorf("soak of %g s and averaging of %g s: %w", pt.Soak, pt.Average, ErrCard)
	case pt.Choke != "" && pt.Choke != Armed && pt.Choke != Disarmed:
		return fmt.Errorf("choke %q: %w", pt.Choke, ErrCard)
	}
	for i := range pt.Targets {
		t := &pt.Targets[i]
		if !t.Low.Known && !t.High.Known || t.Low.Known && t.High.Known && !(t.Low.V < t.High.V) || t.Value.Known && !(t.Tolerance.V > 0) {
			return fmt.Errorf("target %s has no bounds: %w", t.Quantity, ErrCard)
		}
		s := source{channel: -1}
		if id, ok := strings.CutPrefix(t.Quantity, "channel."); ok {
			if s.channel = slices.Index(channels, id); s.channel < 0 {
				return fmt.Errorf("channel %q: %w", id, ErrUnknown)
			}
		} else if s.quantity, ok = monitor.ParseQuantity(t.Quantity); !ok {
			return fmt.Errorf("quantity %q: %w", t.Quantity, ErrUnknown)
		}
		s.setting = s.channel >= 0 || !slices.Contains(sayChoked, s.quantity)
		d.targets = append(d.targets, s)
	}
	for i := range pt.Needs {
		var list []int
		for _, id := range pt.Needs[i].Channels {
			k := slices.Index(channels, id)
			if k < 0 {
				return fmt.Errorf("channel %q: %w", id, ErrUnknown)
			}
			list = append(list, k)
		}
		d.needs = append(d.needs, list)
	}
	return nil
}
