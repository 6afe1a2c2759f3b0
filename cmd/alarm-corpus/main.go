// Command alarm-corpus measures missed, false and chattering alarms over seeded
// rehearsals, offline. It exits with 1 if there is any.
package main

import (
	"context"
	"fmt"
	"io"
	"os"
	"os/signal"
	"runtime"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/corpus"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	code := command(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command gives 0 if no alarm was missed, false or chattering, 1 if one was or the
// corpus cannot be played, 2 when called wrongly.
func command(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := pflag.NewFlagSet("alarm-corpus", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	var (
		rig     = flags.String("rig", "testdata/rigs/example.yaml", "rig file")
		seed    = flags.Uint64("seed", 1, "number that all chance comes from")
		hours   = flags.Float64("hours", 300, "hours of calm running")
		events  = flags.Float64("events", 1, "times the usual number of runs with events")
		workers = flags.Int("workers", runtime.NumCPU(), "runs at a time")
		short   = flags.Bool("short", false, "the part that the tests play")
		asJSON  = flags.Bool("json", false, "one JSON object per rule")
		list    = flags.Bool("list", false, "list each mishap, on standard error")
	)
	if err := flags.Parse(args); err != nil || flags.NArg() > 0 || !(*hours > 0 && *events > 0) || *workers < 1 {
		if err == nil {
			_, _ = fmt.Fprintln(stderr, "alarm-corpus: takes no arguments; --hours, --events and --workers are above 0")
		}
		return 2
	}
	o := corpus.Options{Seed: *seed, Hours: *hours, Events: *events, Workers: *workers}
	if *short {
		o = corpus.Short(*workers)
	}
	tell := func(err error) int {
		_, _ = fmt.Fprintln(stderr, "alarm-corpus:", err)
		return 1
	}
	c, err := corpus.Open(*rig)
	if err != nil {
		return tell(err)
	}
	began, next := time.Now(), time.Now()
	report, err := c.Run(ctx, o, func(done, of int) {
		if now := time.Now(); !now.Before(next) {
			next = now.Add(2 * time.Second)
			_, _ = fmt.Fprintf(stderr, "%d of %d runs, %v\n", done, of, now.Sub(began).Round(time.Second))
		}
	})
	if err != nil {
		return tell(err)
	}
	if *list {
		for _, m := range report.Mishaps {
			_, _ = fmt.Fprintln(stderr, m)
		}
	}
	write := report.WriteTable
	if *asJSON {
		write = report.WriteJSON
	}
	if err := write(stdout); err != nil {
		return tell(err)
	}
	_, _ = fmt.Fprintf(stderr, "took %v\n", time.Since(began).Round(time.Second))
	if report.Failed() {
		return 1
	}
	return 0
}
