package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os/user"
	"slices"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// reduceCommand steps a stored run through another configuration.
func reduceCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("reduce RUN --rig OTHER.yaml | --swaps | --zero WHICH", "Step the records of a stored run through another rig file: corrected calibrations, throat area, coefficients, rules.\n"+
		"The result is stored as a run of its own beside it, RUN-r1 and so on; the run itself stays as it is.\n"+
		"`throatwatch compare RUN RUN-r1` tells the differences.", stderr)
	data := fs.String("data", "data", "data folder")
	rig := fs.String("rig", "", "the other rig file")
	swaps := fs.Bool("swaps", false, "use the calibrations that were entered with sensor swaps, each from its time on; without --rig with the files of the run")
	zero := fs.String("zero", "", "subtract the zeros of the pressures that the checks have found: before, after or interpolated between the two")
	note := fs.String("note", "", "what is corrected, and why")
	by := fs.String("by", "", "who reduces it (default: the user of this machine)")
	asJSON := fs.Bool("json", false, "progress and result as JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 || *rig == "" && !*swaps && *zero == "" {
		_, _ = fmt.Fprintln(stderr, "throatwatch reduce: give one run, and --rig, --swaps or --zero; `throatwatch runs` lists the runs")
		return 2
	}
	if u, err := user.Current(); *by == "" && err == nil {
		*by = u.Username
	}
	progress := newProgress(stderr, *asJSON)
	o := watch.ReduceOptions{Run: rest[0], By: *by, Note: *note, Zero: *zero}
	o.Progress = func(part float64, n int64) { progress.show(part, n, "records") }
	res, err := reduceRun(ctx, *data, *rig, *swaps, o)
	progress.end()
	if err == nil && *asJSON {
		err = printJSON(stdout, reducedView(&res))
	}
	switch {
	case err != nil:
		_, _ = fmt.Fprintln(stderr, "throatwatch reduce:", err)
		return 1
	case !*asJSON:
		printReduced(stdout, &res)
	}
	return 0
}

// reduceRun reduces the run by a rig file, by the swaps that were entered, or both.
func reduceRun(ctx context.Context, dir, rig string, swaps bool, o watch.ReduceOptions) (res watch.Reduced, err error) {
	if rig != "" {
		if o, err = reduceOptions(rig, o); err != nil {
			return res, err
		}
	}
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return res, err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	if swaps {
		if o, err = withSwaps(ctx, runs, o); err != nil {
			return res, err
		}
	}
	return runs.Reduce(ctx, o)
}

// withSwaps adds the swaps that were entered to the configuration, or to that of the run.
func withSwaps(ctx context.Context, runs watch.StoredRuns, o watch.ReduceOptions) (watch.ReduceOptions, error) {
	swaps, bundle, err := runs.Swaps(ctx, o.Run)
	switch {
	case err != nil:
		return o, err
	case len(swaps) == 0:
		return o, fmt.Errorf("no calibration was entered with a swap in run %s that its files do not have: `throatwatch log %s` lists the swaps; a rig file with swaps: goes with --rig", o.Run, o.Run)
	case o.Bundle != nil:
		bundle = o.Bundle
	}
	var faults []config.Fault
	if o.Bundle, faults = config.WithSwaps(bundle, swaps); len(faults) > 0 {
		return o, watch.Faults(faults)
	}
	o.Config, faults = config.Parse(o.Bundle)
	return o, watch.Faults(faults)
}

// reduceOptions adds the configuration of a rig file.
func reduceOptions(rig string, o watch.ReduceOptions) (watch.ReduceOptions, error) {
	bundle, cfg, faults := config.Load(rig)
	o.Bundle, o.Config = bundle.Marshal(), cfg
	return o, watch.Faults(faults)
}

// reducedJSON is a reduction as --json prints it.
type reducedJSON struct {
	Run          string     `json:"run"`
	Parent       string     `json:"parent"`
	Digest       string     `json:"digest"`
	ParentDigest string     `json:"parent_digest"`
	Same         bool       `json:"same"`
	ConfigHash   string     `json:"config_hash"`
	Alarms       int        `json:"alarms"`
	ParentAlarms int        `json:"parent_alarms"`
	Swaps        []swapJSON `json:"swaps"`
	Zero         string     `json:"zero"`  // which zeros were subtracted, "" = none
	Zeros        []zeroJSON `json:"zeros"` // each where it was found
}

type zeroJSON struct {
	Channel string       `json:"channel"`
	T       monitor.Time `json:"t"`
	Offset  float64      `json:"offset_pa"`
	U95     float64      `json:"u95_pa"`
}

type swapJSON struct {
	Channel   string `json:"channel"`
	Serial    string `json:"serial"`
	ValidFrom string `json:"valid_from"`
	By        string `json:"by"`
	Reason    string `json:"reason"`
}

func reducedView(r *watch.Reduced) reducedJSON {
	v := reducedJSON{
		Run: r.Run.ID, Parent: r.Parent.ID, Digest: r.Run.Digest, ParentDigest: r.Parent.Digest, Same: r.Same,
		ConfigHash: r.Run.ConfigHash, Alarms: r.Run.Alarms, ParentAlarms: r.Parent.Alarms, Swaps: []swapJSON{},
		Zero: r.Run.Origin.Zero, Zeros: []zeroJSON{},
	}
	for _, z := range r.Zeros {
		for _, p := range z.Points {
			v.Zeros = append(v.Zeros, zeroJSON{z.Channel, p.T, p.Offset, p.U95})
		}
	}
	for _, s := range swapsOf(r) {
		v.Swaps = append(v.Swaps, swapJSON{s.Channel, s.Serial, *utc(s.ValidFrom), s.By, s.Reason})
	}
	return v
}

// swapsOf gives the sensor swaps that were entered up to the end of the run: whoever
// corrects a calibration has to know them.
func swapsOf(r *watch.Reduced) (list []pipeline.Swap) {
	for _, s := range r.Swaps {
		if r.Run.Ended == 0 || s.ValidFrom <= r.Run.Ended {
			list = append(list, s)
		}
	}
	return list
}

func printReduced(w io.Writer, r *watch.Reduced) {
	_, _ = fmt.Fprintf(w, "%s: %s stepped through configuration %.12s; its own is %.12s\n", r.Run.ID, r.Parent.ID, r.Run.ConfigHash, r.Parent.ConfigHash)
	switch {
	case r.Same:
		_, _ = fmt.Fprintf(w, "the same as %s, bit for bit: sha256 %s\n", r.Parent.ID, r.Run.Digest)
	case r.Run.ConfigHash == r.Parent.ConfigHash && r.Parent.Build != watch.Build():
		_, _ = fmt.Fprintf(w, "the configuration is the same, the build is another: %s, recorded by %s\n", watch.Build(), r.Parent.Build)
	default:
		_, _ = fmt.Fprintf(w, "sha256 %s\n%d alarms were raised, %d in %s; `throatwatch compare %s %s` tells more\n",
			r.Run.Digest, r.Run.Alarms, r.Parent.Alarms, r.Parent.ID, r.Parent.ID, r.Run.ID)
	}
	if r.Run.State == runfile.StateInterrupted {
		_, _ = fmt.Fprintln(w, "the run does not end in its records")
	}
	for _, z := range r.Zeros {
		for _, p := range z.Points {
			_, _ = fmt.Fprintf(w, "zero subtracted: %s %+.1f Pa ± %.1f Pa, found at %s\n", z.Channel, p.Offset, p.U95, stamp(p.T, zoneOf(r.Run.TimeZone)))
		}
	}
	for _, s := range swapsOf(r) {
		used := "one calibration of the rig file holds for the whole run"
		if slices.ContainsFunc(r.Config.Compute.Channels, func(c compute.Channel) bool {
			return c.ID == s.Channel && slices.ContainsFunc(c.Swaps, func(of compute.Swap) bool { return of.From == s.ValidFrom })
		}) {
			used = "its own calibration holds since then"
		}
		_, _ = fmt.Fprintf(w, "sensor swap: %s has %s since %s (%s, %s): %s\n",
			s.Channel, s.Serial, stamp(rules.Time(s.ValidFrom), zoneOf(r.Run.TimeZone)), s.By, oneLine(s.Reason), used)
	}
}
