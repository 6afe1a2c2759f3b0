package compute

// Zero is what a pressure reads too much, as checks at rest have found it: subtracted from
// every reading by the event time of its sample, before a reference is added. Between its
// two points it goes in a straight line, outside of them it stays. The zero value is none.
type Zero struct {
	Points [2]ZeroPoint // by time; both the same where only one was found
}

// ZeroPoint is a zero as it was found.
type ZeroPoint struct {
	T      int64   // event time, ns UTC
	Offset float64 // Pa
	U95    float64 // Pa, 95 % uncertainty of Offset
}

// At gives the offset at the event time t, ns UTC, in Pa.
func (z *Zero) At(t int64) float64 {
	a, b := &z.Points[0], &z.Points[1]
	switch {
	case t <= a.T:
		return a.Offset
	case t >= b.T:
		return b.Offset
	}
	return a.Offset + (b.Offset-a.Offset)*float64(t-a.T)/float64(b.T-a.T)
}

// Stated tells whether there is a zero to subtract.
func (z *Zero) Stated() bool { return *z != Zero{} }
