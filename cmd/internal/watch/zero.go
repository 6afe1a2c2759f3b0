package watch

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"slices"

	"throatwatch/cmd/internal/config"
	"throatwatch/dashboard"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// The zeros that a reduction can subtract.
const (
	ZeroBefore       = "before"       // of the check before the run
	ZeroAfter        = "after"        // of the last check after it
	ZeroInterpolated = "interpolated" // between the two by event time
)

// ErrNoZero is returned where the checks that are needed were not made.
var ErrNoZero = errors.New("there are no zeros to subtract")

// zeroed completes the options of a reduction that subtracts zeros, and gives these: to the
// configuration that the options have, or else to that of the run, come the zeros that the
// checks of the run have found of its pressures.
func zeroed(ctx context.Context, f *runfile.File, h *runfile.Header, o ReduceOptions) (ReduceOptions, []config.Zero, error) {
	checks, err := dashboard.ReadChecks(ctx, f, h)
	if err != nil {
		return o, nil, err
	}
	c, err := f.LastCheckpoint(ctx, math.MaxInt64)
	if err != nil {
		return o, nil, err
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return o, nil, err
	}
	if o.Bundle == nil {
		o.Bundle = state.Bundle
	}
	zeros, err := zerosOf(checks, o.Zero, state.Swaps)
	if err != nil {
		return o, nil, err
	}
	var faults []config.Fault
	if o.Bundle, faults = config.WithZeros(o.Bundle, zeros); len(faults) > 0 {
		return o, nil, Faults(faults)
	}
	o.Config, err = Parse(o.Bundle)
	return o, zeros, err
}

// copyAmended takes the checks over that were made after the end of a run: they came of no
// record of its file.
func copyAmended(ctx context.Context, from, to *runfile.File, h *runfile.Header) error {
	if h.Ended == 0 {
		return nil
	}
	var events []runfile.Event
	err := from.Events(ctx, h.Ended, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "checks" {
			return nil
		}
		var c check.Result
		if err := json.Unmarshal(e.JSON, &c); err != nil {
			return fmt.Errorf("event %d.%d: %w", e.Epoch, e.N, err)
		}
		if c.Run == h.Stepped() && int64(c.Began) >= h.Ended {
			own := *e
			own.JSON = bytes.Clone(e.JSON)
			events = append(events, own)
		}
		return nil
	})
	if err != nil || len(events) == 0 {
		return err
	}
	return to.Commit(ctx, runfile.Batch{Events: events})
}

// zerosOf gives the zeros of the checks of a run, at the middle of each window. A channel
// whose sensor was exchanged from the first check on has none: that of one sensor is not
// that of the other.
func zerosOf(checks []check.Result, which string, swaps []pipeline.Swap) ([]config.Zero, error) {
	var last [2]*check.Result // before, after
	for i := range checks {
		last[min(1, slices.Index([]string{check.Before, check.After}, checks[i].Phase))] = &checks[i]
	}
	var from []*check.Result
	switch which {
	case ZeroBefore:
		from = last[:1]
	case ZeroAfter:
		from = last[1:]
	case ZeroInterpolated:
		from = last[:]
	default:
		return nil, fmt.Errorf("zero %q: give before, after or interpolated", which)
	}
	for i, c := range from {
		if c == nil {
			missing := which
			if which == ZeroInterpolated {
				missing = []string{check.Before, check.After}[i]
			}
			return nil, fmt.Errorf("zero %s: no check %s the run is stored with it: %w", which, missing, ErrNoZero)
		}
	}
	var out []config.Zero
	for _, it := range from[0].Zeros() {
		if slices.ContainsFunc(swaps, func(s pipeline.Swap) bool { return s.Channel == it.Channel && s.ValidFrom > int64(checks[0].Began) }) {
			continue
		}
		z := config.Zero{Channel: it.Channel}
		for _, c := range from {
			zeros := c.Zeros()
			if k := slices.IndexFunc(zeros, func(o check.Item) bool { return o.Channel == it.Channel }); k >= 0 {
				z.Points = append(z.Points, config.ZeroPoint{T: c.Began + (c.Ended-c.Began)/2, Offset: zeros[k].Value.V, U95: zeros[k].U95.V})
			}
		}
		if len(z.Points) == len(from) { // a zero that only one of two checks has found tells of no course
			out = append(out, z)
		}
	}
	if len(out) == 0 {
		return nil, fmt.Errorf("zero %s: the checks have found none: %w", which, ErrNoZero)
	}
	return out, nil
}
