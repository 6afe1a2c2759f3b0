package archive

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

func TestDecimate(t *testing.T) {
	nan := math.NaN()
	times := []int64{0, 10, 20, 30, 40, 50, 60, 70, 80, 90}
	for _, c := range []struct {
		name     string
		values   []float64
		from, to int64
		points   int
		want     string
		source   string
	}{
		{"raw", []float64{1, 2, nan, 4, 5, 6, 7, 8, 9, 10}, 10, 40, 3, "[10 20 30] [2 NaN 4] [2 NaN 4] [2 NaN 4] [1 0 1]", "as many rows as points: kept"},
		{"buckets", []float64{1, 9, 2, 4, 3, nan, nan, nan, -8, 7}, 0, 100, 3, "[0 34 68] [1 3 -8] [9 3 7] [4 3 7] [4 1 2]", "width ceil(100/3) = 34: rows 0–30, 40–60, 70–90"},
		{"nothing", []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}, 100, 200, 3, "[] [] [] [] []", "no row in the span"},
		{"empty span", []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}, 20, 20, 3, "[] [] [] [] []", "from = to"},
		{"one point", []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}, 0, 91, 1, "[0] [1] [10] [10] [10]", "all rows in one bucket"},
		{"no points", []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}, 0, 91, 0, "[0] [1] [10] [10] [10]", "at least one point"},
		{"wide span", []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}, math.MinInt64, math.MaxInt64, 2, "[0] [1] [10] [10] [10]", "span of 2^64 − 1 ns, width 2^63: the second half begins at 0"},
	} {
		s := Decimate(times, c.values, c.from, c.to, c.points)
		if got := fmt.Sprint(s.T, s.Min, s.Max, s.Last, s.N); got != c.want {
			t.Errorf("%s: %s, want %s (%s)", c.name, got, c.want, c.source)
		}
	}
}

func TestDecimateShowsGaps(t *testing.T) {
	s := Decimate([]int64{10, 11, 12, 70, 71}, []float64{1, 2, 3, 4, 5}, 0, 100, 4)
	if got, want := fmt.Sprint(s.T, s.Min, s.N), "[0 25 50] [1 NaN 4] [3 0 2]"; got != want {
		t.Errorf("%s, want %s: the empty bucket between is a gap, the one behind is not", got, want)
	}
}

// TestDecimateIdentities: whatever the pieces and the number of points, no value is
// lost: N adds up, and least and largest survive.
func TestDecimateIdentities(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for range 300 {
		n := 1 + r.IntN(400)
		times, values := make([]int64, n), make([]float64, n)
		count, lo, hi, at := 0, math.Inf(1), math.Inf(-1), start
		for i := range n {
			at += r.Int64N(1e9)
			times[i], values[i] = at, r.NormFloat64()
			if r.IntN(5) == 0 {
				values[i] = math.NaN()
				continue
			}
			count, lo, hi = count+1, min(lo, values[i]), max(hi, values[i])
		}
		points := 1 + r.IntN(200)
		d := NewDecimator(start, at+1, points)
		cut := r.IntN(n + 1)
		d.Add(times[:cut], values[:cut])
		d.Add(times[cut:], values[cut:])
		s := d.Series()
		whole := Decimate(times, values, start, at+1, points)
		if fmt.Sprint(s) != fmt.Sprint(whole) {
			t.Fatal("pieces give another result than the whole")
		}
		total, least, most := 0, math.Inf(1), math.Inf(-1)
		for i, k := range s.N {
			total += k
			if (k == 0) != math.IsNaN(s.Min[i]) || (k == 0) != math.IsNaN(s.Last[i]) {
				t.Fatalf("N %d with min %v, last %v", k, s.Min[i], s.Last[i])
			}
			if k > 0 {
				least, most = min(least, s.Min[i]), max(most, s.Max[i])
			}
		}
		if total != count || least != lo || most != hi || len(s.T) > points {
			t.Fatalf("%d of %d values, %v … %v of %v … %v, %d of %d points", total, count, least, most, lo, hi, len(s.T), points)
		}
	}
}

func BenchmarkDecimate(b *testing.B) {
	const rows = 72_000 // one hour at 20 scans/s
	r := rand.New(rand.NewPCG(4, 4))
	times, values := make([]int64, rows), make([]float64, rows)
	for i := range rows {
		times[i], values[i] = start+int64(i)*50_000_000, r.NormFloat64()
	}
	b.ReportAllocs()
	for i := 0; b.Loop(); i++ {
		from := start + int64(i%1000)*50_000_000
		sink += len(Decimate(times, values, from, times[rows-1], 2000).T)
	}
	b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds()/1e6, "Mvalues/s")
}
