package compare

import (
	"cmp"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"throatwatch/dashboard/points"
	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
)

// raise is the raising of an alarm, t from the zero of its run, ns.
type raise struct {
	rule, title string
	t           int64
}

// raises gives what was raised in a run, by rule and time.
func raises(ctx context.Context, r *Run, zero int64) (list []raise, err error) {
	to := int64(math.MaxInt64)
	if r.Header.Ended != 0 {
		to = r.Header.Ended + 1
	}
	err = r.File.Events(ctx, r.Header.Started, to, func(e *runfile.Event) error {
		if e.Kind != "alarm" {
			return nil
		}
		var a rules.Alarm
		if err := json.Unmarshal(e.JSON, &a); err != nil {
			return fmt.Errorf("alarm %d.%d: %w", e.Epoch, e.N, err)
		}
		if a.State == rules.AlarmState(alarm.Unacknowledged) && a.Raised == a.Changed {
			list = append(list, raise{a.Rule, a.Title, int64(a.Raised) - zero})
		}
		return nil
	})
	slices.SortStableFunc(list, func(a, b raise) int { return cmp.Or(cmp.Compare(a.rule, b.rule), cmp.Compare(a.t, b.t)) })
	return list, err
}

// alarms compares what was raised. Those of one rule are paired in their order where they
// are not further apart than Within.
func (s *Scans) alarms(ctx context.Context, a, b *Run, zeroA, zeroB int64, o Options) error {
	within := o.Within
	if within == 0 {
		within = 30 * second
	}
	inA, err := raises(ctx, a, zeroA)
	if err != nil {
		return fmt.Errorf("compare %s: %w", a.Header.ID, err)
	}
	inB, err := raises(ctx, b, zeroB)
	if err != nil {
		return fmt.Errorf("compare %s: %w", b.Header.ID, err)
	}
	number := func(t, zero, started int64) *points.Number {
		n := points.Number(float64(t+zero-started) / 1e9)
		return &n
	}
	only := func(change string, r raise) Alarm {
		x := Alarm{Change: change, Rule: r.rule, Title: r.title}
		if change == "vanishes" {
			x.AtA = number(r.t, zeroA, a.Header.Started)
		} else {
			x.AtB = number(r.t, zeroB, b.Header.Started)
		}
		return x
	}
	s.Alarms = []Alarm{}
	for len(inA) > 0 || len(inB) > 0 {
		order := 0
		switch {
		case len(inB) == 0:
			order = -1
		case len(inA) == 0:
			order = 1
		default:
			if order = cmp.Compare(inA[0].rule, inB[0].rule); order == 0 && max(inA[0].t-inB[0].t, inB[0].t-inA[0].t) > within {
				order = cmp.Compare(inA[0].t, inB[0].t)
			}
		}
		switch {
		case order < 0:
			s.Alarms, inA = append(s.Alarms, only("vanishes", inA[0])), inA[1:]
		case order > 0:
			s.Alarms, inB = append(s.Alarms, only("appears", inB[0])), inB[1:]
		default:
			if inA[0].t == inB[0].t {
				s.AlarmsSame++
			} else {
				moved := points.Number(float64(inB[0].t-inA[0].t) / 1e9)
				s.Alarms = append(s.Alarms, Alarm{
					Change: "moves", Rule: inA[0].rule, Title: inA[0].title,
					AtA: number(inA[0].t, zeroA, a.Header.Started), AtB: number(inB[0].t, zeroB, b.Header.Started), Moved: &moved,
				})
			}
			inA, inB = inA[1:], inB[1:]
		}
	}
	return nil
}
