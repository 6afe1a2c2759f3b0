// Command storage-figures measures what storing a run costs: a rehearsed run of 60
// channels with 100 values per second each and 20 scans per second is recorded into a
// data folder, and its file, its replay and the answers of the page's server are held
// against what is promised. It exits with 1 if a promise is not kept.
//
// Replay is measured in processor time, so that other programs on the machine count
// little; answers are measured by the clock.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"text/tabwriter"
	"time"

	"github.com/spf13/pflag"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	code := command(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command gives 0 if every promise is kept, 1 if one is not or the run cannot be
// made, 2 when called wrongly.
func command(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := pflag.NewFlagSet("storage-figures", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	var o options
	flags.StringVar(&o.rig, "rig", "testdata/rigs/example.yaml", "rig file, to which channels are added")
	flags.IntVar(&o.channels, "channels", 60, "channels")
	flags.Float64Var(&o.rate, "rate", 100, "values of each channel per second")
	flags.DurationVar(&o.length, "length", 4*time.Minute, "length of the test, at least 2m; the promise is for 4h")
	flags.StringVar(&o.dir, "data", "", "data folder, which is kept; the run of an earlier measurement is measured again (default: a temporary one)")
	if err := flags.Parse(args); err != nil || flags.NArg() > 0 || o.length < 2*time.Minute {
		if err == nil {
			_, _ = fmt.Fprintln(stderr, "storage-figures: takes no arguments; --length is at least 2m")
		}
		return 2
	}
	list, err := measure(ctx, o, func(what string) { _, _ = fmt.Fprintln(stderr, what) })
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "storage-figures:", err)
		return 1
	}
	if err := write(stdout, list); err != nil {
		_, _ = fmt.Fprintln(stderr, "storage-figures:", err)
		return 1
	}
	for i := range list {
		if !list[i].kept() {
			return 1
		}
	}
	return 0
}

// figure is one thing measured. A bound that is 0 does not count.
type figure struct {
	name        string
	value       float64
	unit        string
	least, most float64 // as promised
	timed       bool    // differs from machine to machine
}

func (f *figure) kept() bool {
	return (f.least == 0 || f.value >= f.least) && (f.most == 0 || f.value <= f.most)
}

func write(w io.Writer, list []figure) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	for i := range list {
		f := &list[i]
		promise := ""
		switch {
		case f.least != 0:
			promise = fmt.Sprintf("at least %g", f.least)
		case f.most != 0:
			promise = fmt.Sprintf("at most %g", f.most)
		}
		if !f.kept() {
			promise += ": not kept"
		}
		_, err := fmt.Fprintf(t, "%s\t%.4g %s\t%s\n", f.name, f.value, f.unit, promise)
		if err != nil {
			return errors.Join(err, t.Flush())
		}
	}
	return t.Flush()
}
