// Package bench measures throatwatch beside its ceilings: what the parts can do by
// themselves, in the same run and on the same machine.
//
// A figure is the median of pairs, ours and the other by turns, the order of the two
// changing from pair to pair, so that what else the machine does falls on both. Only
// the ratio of a pair says something about a machine that others use too.
package bench

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"syscall"
	"text/tabwriter"
	"time"
)

// Figure is one line of the table.
type Figure struct {
	Name   string   `json:"figure"` // with its unit
	Ours   float64  `json:"ours"`
	Beside *float64 `json:"beside"` // the ceiling; null where there is none
	Ratio  *float64 `json:"ratio"`  // median of ours/beside over the pairs
	Target string   `json:"target"`
	Met    *bool    `json:"met"` // null where the figure is only reported
}

// Options say how long is measured and with what.
type Options struct {
	Rig     string // rig file, the example
	Program string // throatwatch
	Dir     string // scratch
	Quick   bool   // one short pair each: that it works, not how fast
	Only    string // the group to be measured; "" = all
}

// pairs gives how many pairs a figure is the median of.
func (o *Options) pairs() int {
	if o.Quick {
		return 1
	}
	return 5
}

// span gives for how long a short operation is repeated.
func (o *Options) span() time.Duration {
	if o.Quick {
		return 5 * time.Millisecond
	}
	return 200 * time.Millisecond
}

// Group is figures that are measured together.
type Group struct {
	Name    string
	Measure func(context.Context, *Options) ([]Figure, error)
}

// Groups gives all groups in the order of the table.
func Groups() []Group {
	return []Group{
		{"intake", intake},
		{"latency", latency},
		{"stored", stored},
		{"point", points},
		{"critical", critical},
		{"rules", hundredRules},
		{"growth", growth},
	}
}

// Run measures and calls each with every figure as it is known.
func Run(ctx context.Context, o Options, each func(group string, f *Figure)) ([]Figure, error) {
	var all []Figure
	for _, g := range Groups() {
		if o.Only != "" && o.Only != g.Name {
			continue
		}
		figures, err := g.Measure(ctx, &o)
		if err != nil {
			return all, fmt.Errorf("%s: %w", g.Name, err)
		}
		for i := range figures {
			each(g.Name, &figures[i])
		}
		all = append(all, figures...)
	}
	if len(all) == 0 {
		return nil, fmt.Errorf("there are no figures of the name %q", o.Only)
	}
	return all, nil
}

// pair is one measurement of ours and what stands beside it.
type pair struct{ ours, beside float64 }

// alternate measures n pairs by turns.
func alternate(n int, ours, beside func() (float64, error)) ([]pair, error) {
	list := make([]pair, n)
	for i := range list {
		var err error
		one := func() {
			if err == nil {
				list[i].ours, err = ours()
			}
		}
		other := func() {
			if err == nil {
				list[i].beside, err = beside()
			}
		}
		if i%2 == 0 {
			one()
			other()
		} else {
			other()
			one()
		}
		if err != nil {
			return nil, err
		}
	}
	return list, nil
}

func median(list []pair, of func(pair) float64) float64 {
	v := make([]float64, len(list))
	for i, p := range list {
		v[i] = of(p)
	}
	slices.Sort(v)
	return (v[(len(v)-1)/2] + v[len(v)/2]) / 2
}

func ours(p pair) float64   { return p.ours }
func beside(p pair) float64 { return p.beside }
func ratio(p pair) float64  { return p.ours / p.beside }

// compared makes a figure of pairs; met judges it, nil = it is only reported.
func compared(name string, list []pair, target string, met func(f *Figure) bool) Figure {
	b, r := median(list, beside), median(list, ratio)
	return judged(Figure{Name: name, Ours: median(list, ours), Beside: &b, Ratio: &r, Target: target}, met)
}

// alone makes a figure that nothing stands beside.
func alone(name string, v float64, target string, met func(f *Figure) bool) Figure {
	return judged(Figure{Name: name, Ours: v, Target: target}, met)
}

func judged(f Figure, met func(f *Figure) bool) Figure {
	if met != nil {
		ok := met(&f)
		f.Met = &ok
	}
	return f
}

// perOp gives the ns of processor time that op takes, repeated for at least span: who
// else waits for the processor does not count.
func perOp(span time.Duration, op func()) float64 {
	for n := 64; ; n *= 2 {
		began := used()
		for range n {
			op()
		}
		if took := used() - began; took >= span {
			return float64(took) / float64(n)
		}
	}
}

// used gives the processor time that this process has had.
func used() time.Duration {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		panic(err) // it has no reason to
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}

// WriteJSON writes the figures as an array.
func WriteJSON(path string, figures []Figure) error {
	text, err := json.MarshalIndent(figures, "", "  ")
	if err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	return os.WriteFile(path, append(text, '\n'), 0o644)
}

// WriteTable writes the figures for people.
func WriteTable(w io.Writer, figures []Figure) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "FIGURE\tOURS\tBESIDE\tRATIO\tTARGET\tMET")
	for i := range figures {
		f := &figures[i]
		met := "–"
		if f.Met != nil {
			met = map[bool]string{true: "yes", false: "no"}[*f.Met]
		}
		_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\n", f.Name, number(&f.Ours), number(f.Beside), number(f.Ratio), f.Target, met)
	}
	return t.Flush()
}

func number(v *float64) string {
	switch {
	case v == nil:
		return "–"
	case math.Abs(*v) >= 1000:
		return fmt.Sprintf("%.0f", *v)
	default:
		return fmt.Sprintf("%.3g", *v)
	}
}
