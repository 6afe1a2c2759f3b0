// Command bench measures throatwatch beside its ceilings and prints a table. It exits
// with 0 whether the targets are met or not.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"runtime"
	"strings"
	"syscall"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/bench"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := command(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command gives 0 when everything was measured, 1 when not, 2 when called wrongly.
func command(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	if len(args) > 0 && args[0] == "part" {
		if err := bench.Part(ctx, args[1:], stdout); err != nil {
			_, _ = fmt.Fprintln(stderr, "bench:", err)
			return 1
		}
		return 0
	}
	flags := pflag.NewFlagSet("bench", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	var groups []string
	for _, g := range bench.Groups() {
		groups = append(groups, g.Name)
	}
	var (
		program = flags.String("program", ".build/throatwatch", "throatwatch, as it was built")
		rig     = flags.String("rig", "testdata/rigs/example.yaml", "rig file")
		out     = flags.String("out", ".build/bench.json", "file for the figures")
		quick   = flags.Bool("quick", false, "one short pair each: that it works, not how fast")
		only    = flags.String("only", "", "one group of figures: "+strings.Join(groups, ", "))
	)
	if err := flags.Parse(args); err != nil || flags.NArg() > 0 {
		if err == nil {
			_, _ = fmt.Fprintln(stderr, "bench: takes no arguments")
		}
		return 2
	}
	if err := measure(ctx, bench.Options{Rig: *rig, Program: *program, Quick: *quick, Only: *only}, *out, stdout, stderr); err != nil {
		_, _ = fmt.Fprintln(stderr, "bench:", err)
		return 1
	}
	return 0
}

func measure(ctx context.Context, o bench.Options, out string, stdout, stderr io.Writer) (err error) {
	if o.Dir, err = os.MkdirTemp("", "bench-"); err != nil {
		return err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(o.Dir)) }()
	_, _ = fmt.Fprintf(stdout, "%s %s/%s, %d processors; load before: %s\n", runtime.Version(), runtime.GOOS, runtime.GOARCH, runtime.NumCPU(), load())
	figures, err := bench.Run(ctx, o, func(group string, f *bench.Figure) {
		_, _ = fmt.Fprintf(stderr, "%s: %s\n", group, f.Name)
	})
	if err != nil {
		return err
	}
	if err := bench.WriteTable(stdout, figures); err != nil {
		return err
	}
	return bench.WriteJSON(out, figures)
}

// load gives the load averages where the system tells them.
func load() string {
	text, err := os.ReadFile("/proc/loadavg")
	if err != nil {
		return "not known"
	}
	return strings.Join(strings.Fields(string(text))[:3], " ")
}
