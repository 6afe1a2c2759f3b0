package config

import (
	"fmt"
	"math"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
)

// Zero is what a pressure reads too much at rest, as checks have found it. It stands in the
// bundle of a reduction beside the files.
type Zero struct {
	Channel string      `json:"channel"`
	Points  []ZeroPoint `json:"points"` // one, or two by time with a straight line between
}

// ZeroPoint is a zero as it was found.
type ZeroPoint struct {
	T      monitor.Time `json:"t"`
	Offset float64      `json:"offset_pa"`
	U95    float64      `json:"u95_pa"`
}

// WithZeros gives a bundle with zeros to subtract, in the place of those that it has.
func WithZeros(bundle []byte, zeros []Zero) ([]byte, []Fault) {
	b, faults := unmarshal(bundle)
	if len(faults) > 0 {
		return nil, faults
	}
	b.Zeros = zeros
	return b.Marshal(), nil
}

// subtract gives the channels their zeros.
func (r *rig) subtract(zeros []Zero) {
	for _, z := range zeros {
		at := node{doc: r.doc, path: "zeros", line: 1, col: 1}
		i := r.index(z.Channel)
		switch {
		case i < 0:
			at.fault(fmt.Sprintf("there is no channel %q to subtract a zero from", z.Channel), nearest(z.Channel, r.ids()))
			continue
		case r.spec(i).Reference == calib.ReferenceNone:
			at.fault(fmt.Sprintf("channel %q is no pressure", z.Channel), "a zero is that of a pressure")
			continue
		case len(z.Points) < 1 || len(z.Points) > 2 || len(z.Points) == 2 && z.Points[0].T >= z.Points[1].T:
			at.fault(fmt.Sprintf("the zero of %q has no points in order of time", z.Channel), "one, or two of which the first is earlier")
			continue
		}
		var zero compute.Zero
		for k := range zero.Points {
			p := z.Points[min(k, len(z.Points)-1)]
			if math.IsNaN(p.Offset-p.Offset) || p.T == 0 {
				at.fault(fmt.Sprintf("the zero of %q is no number at a time", z.Channel), "take it from a check")
			}
			zero.Points[k] = compute.ZeroPoint{T: int64(p.T), Offset: p.Offset, U95: p.U95}
		}
		r.cfg.Compute.Channels[i].Zero = zero
	}
}
