// Command soak lets a watch run for long at a high rate and prints, as time passes, its
// memory, its open files, what it took and how fast its alarms came. It exits with 1 if
// a value was neither used nor counted as late.
package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/faults"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := command(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command gives 0 when no value was lost, 1 when one was or it could not be done, 2 when
// called wrongly.
func command(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	o := faults.SoakOptions{Seed: 1}
	flags := pflag.NewFlagSet("soak", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	program := flags.String("program", ".build/throatwatch", "throatwatch, as it was built")
	asJSON := flags.Bool("json", false, "all readings as JSON, at the end")
	flags.StringVar(&o.Rig, "rig", "testdata/rigs/example.yaml", "rig file")
	flags.StringVar(&o.Data, "data", "", "folder for the data; in memory if not given")
	flags.IntVar(&o.Channels, "channels", 120, "channels at least; further ones are only recorded")
	flags.Float64Var(&o.Values, "values", 50_000, "values per second")
	flags.DurationVar(&o.For, "for", 30*time.Minute, "in all")
	flags.DurationVar(&o.Every, "every", 0, "between readings; a twentieth of all if not given")
	err := flags.Parse(args)
	if err == nil && flags.NArg() > 0 {
		err = errors.New("takes no arguments")
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "soak:", err)
		return 2
	}
	o.Program = []string{*program}
	if o.Every <= 0 {
		o.Every = max(o.For/20, time.Second)
	}
	s, err := soak(ctx, o, *asJSON, stdout)
	if err == nil && s.Lost > 0 {
		err = fmt.Errorf("%.0f of %d values were neither used nor counted", s.Lost, s.Sent)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "soak:", err)
		return 1
	}
	return 0
}

func soak(ctx context.Context, o faults.SoakOptions, asJSON bool, stdout io.Writer) (s *faults.Soaked, err error) {
	if o.Dir, err = os.MkdirTemp("", "soak-"); err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(o.Dir)) }()
	if o.Data == "" {
		if o.Data, err = os.MkdirTemp("/dev/shm", "soak-"); err != nil {
			o.Data = o.Dir // no folder in memory here
		}
		defer func() { err = errors.Join(err, os.RemoveAll(o.Data)) }()
	}
	show := func(*faults.Reading) {}
	if !asJSON {
		_, _ = fmt.Fprintln(stdout, faults.SoakHead)
		show = func(r *faults.Reading) { _ = faults.WriteReading(stdout, r) } // a closed terminal
	}
	if s, err = faults.Soak(ctx, o, show); err != nil {
		return nil, err
	}
	if asJSON {
		e := json.NewEncoder(stdout)
		e.SetIndent("", "  ")
		return s, e.Encode(s)
	}
	_, err = fmt.Fprintf(stdout, "%d channels, %d values sent, %.0f used, %.0f counted as late, %.0f lost\n", s.Channels, s.Sent, s.Used, s.Late, s.Lost)
	return s, err
}
