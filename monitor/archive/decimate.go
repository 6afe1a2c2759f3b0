package archive

import (
	"math"
	"slices"
)

// Series is a column thinned for a plot. All slices have one length. Where N is 0
// the values are NaN: nothing was measured there.
type Series struct {
	T              []int64 // ns UTC: of the row, or the start of the bucket
	Min, Max, Last []float64
	N              []int // values that are not missing
}

// Decimator thins one column that comes in pieces. While no more rows fall into the
// span than points are allowed they are kept as they are; after that they go into
// buckets of equal width, whose least and largest values are kept, so that no spike
// is lost. Rows need not be in order for buckets to be right.
type Decimator struct {
	from, to int64
	points   int
	width    uint64 // ns per bucket; 0 while rows are kept as they are
	s        Series
}

// NewDecimator thins the span from (inclusive) to (exclusive), ns UTC, to at most
// the given number of points, at least one.
func NewDecimator(from, to int64, points int) *Decimator {
	return &Decimator{from: from, to: to, points: max(points, 1)}
}

// Add takes rows; values has the length of times.
func (d *Decimator) Add(times []int64, values []float64) {
	for i, t := range times {
		if t < d.from || t >= d.to {
			continue
		}
		v := values[i]
		if d.width > 0 {
			d.bucket(t, v, v, v, present(v))
			continue
		}
		d.s.add(t, v, v, v, present(v))
		if len(d.s.T) > d.points {
			d.fold()
		}
	}
}

func present(v float64) int {
	if v != v {
		return 0
	}
	return 1
}

func (s *Series) add(t int64, lo, hi, last float64, n int) {
	s.T = append(s.T, t)
	s.Min, s.Max, s.Last = append(s.Min, lo), append(s.Max, hi), append(s.Last, last)
	s.N = append(s.N, n)
}

// fold goes over from rows to buckets.
func (d *Decimator) fold() {
	rows := d.s
	d.s = Series{}
	span := uint64(d.to) - uint64(d.from)
	d.width = (span-1)/uint64(d.points) + 1
	nan := math.NaN()
	for i := range d.points {
		offset := uint64(i) * d.width
		if offset >= span {
			break
		}
		d.s.add(int64(uint64(d.from)+offset), nan, nan, nan, -1) // −1: no row yet
	}
	for i, t := range rows.T {
		d.bucket(t, rows.Min[i], rows.Max[i], rows.Last[i], rows.N[i])
	}
}

// bucket puts a row into its bucket.
func (d *Decimator) bucket(t int64, lo, hi, last float64, n int) {
	i := (uint64(t) - uint64(d.from)) / d.width
	s := &d.s
	s.N[i] = max(s.N[i], 0)
	if n == 0 {
		return
	}
	if s.N[i] == 0 {
		s.Min[i], s.Max[i] = lo, hi
	}
	s.Min[i], s.Max[i], s.Last[i] = min(s.Min[i], lo), max(s.Max[i], hi), last
	s.N[i] += n
}

// Series gives the result. Buckets before the first row and behind the last are left
// out; empty ones between are given with N = 0, so that a gap is drawn as a gap.
func (d *Decimator) Series() Series {
	s := d.s
	if d.width == 0 {
		return s
	}
	hasRow := func(n int) bool { return n >= 0 }
	first := slices.IndexFunc(s.N, hasRow)
	end := len(s.N)
	for end > first && s.N[end-1] < 0 {
		end--
	}
	s = Series{s.T[first:end], s.Min[first:end], s.Max[first:end], s.Last[first:end], slices.Clone(s.N[first:end])}
	for i, n := range s.N {
		s.N[i] = max(n, 0)
	}
	return s
}

// Decimate thins a column that is there as a whole; see Decimator.
func Decimate(times []int64, values []float64, from, to int64, points int) Series {
	d := NewDecimator(from, to, points)
	d.Add(times, values)
	return d.Series()
}
