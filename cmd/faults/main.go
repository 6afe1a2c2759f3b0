// Command faults kills a watch, restarts its broker and cuts its link while a data
// system publishes, and prints what became of the data. It exits with 1 unless every
// sample that the broker has accepted is in the scans exactly once.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"path/filepath"
	"strings"
	"syscall"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/faults"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := command(ctx, os.Args[1:], os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}

// command gives 0 when nothing was lost, 1 when something was or a campaign could not
// be done, 2 when called wrongly.
func command(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	o := faults.Options{}
	flags := pflag.NewFlagSet("faults", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	program := flags.String("program", ".build/throatwatch", "throatwatch, as it was built")
	asJSON := flags.Bool("json", false, "the counts as JSON")
	flags.StringVar(&o.Rig, "rig", "testdata/rigs/example.yaml", "rig file")
	flags.IntVar(&o.SiteKills, "kills", 50, "kills of the daemon, with each kind of broker")
	flags.IntVar(&o.Restarts, "restarts", 20, "restarts of the site broker")
	flags.IntVar(&o.Cuts, "cuts", 20, "cuts of the link to the site broker")
	flags.IntVar(&o.Silences, "silences", 10, "times that this link loses what it carries")
	flags.Float64Var(&o.Rate, "rate", 100, "messages per second")
	flags.Uint64Var(&o.Seed, "seed", 1, "of the moments")
	if err := flags.Parse(args); err != nil || flags.NArg() > 0 {
		if err == nil {
			err = errors.New("takes no arguments")
		}
		_, _ = fmt.Fprintln(stderr, "faults:", err)
		return 2
	}
	o.Program, o.EmbeddedKills = []string{*program}, o.SiteKills
	o.Progress = func(name string, done, of int) { _, _ = fmt.Fprintf(stderr, "%s: %d of %d\n", name, done, of) }
	all, err := campaigns(ctx, o)
	write := faults.WriteTable
	if *asJSON {
		write = faults.WriteJSON
	}
	if err := errors.Join(err, write(stdout, all)); err != nil {
		_, _ = fmt.Fprintln(stderr, "faults:", err)
		return 1
	}
	for _, c := range all {
		if !c.Lossless() {
			_, _ = fmt.Fprintf(stderr, "faults: %s: not every accepted sample is in the scans exactly once\n", c.Name)
			return 1
		}
	}
	return 0
}

// lateness is how long a scan waits for a channel here: the data system lives on the
// machine on which programs are killed and started, and may publish late.
const lateness = "lateness: 500 ms"

// campaigns does all of them in folders that are removed.
func campaigns(ctx context.Context, o faults.Options) (all []*faults.Counts, err error) {
	if o.Dir, err = os.MkdirTemp("", "faults-"); err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(o.Dir)) }()
	if o.Data, err = os.MkdirTemp("/dev/shm", "faults-"); err != nil {
		o.Data = o.Dir // no folder in memory here
	}
	defer func() { err = errors.Join(err, os.RemoveAll(o.Data)) }()
	text, err := os.ReadFile(o.Rig)
	if err != nil {
		return nil, err
	}
	o.Rig = filepath.Join(o.Dir, "rig.yaml")
	if err := os.WriteFile(o.Rig, []byte(strings.Replace(string(text), "lateness: 120 ms", lateness, 1)), 0o600); err != nil {
		return nil, err
	}
	err = faults.Run(ctx, o, func(c *faults.Counts) { all = append(all, c) })
	return all, err
}
