package main

import (
	"context"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"text/tabwriter"

	"throatwatch/cmd/internal/watch"
	"throatwatch/rules/pipeline"
)

func lifeCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("life [SERIAL]", "What each engine has been through, or each nozzle, as far as it was watched: starts and how\n"+
		"they went, cycles, hours with a flame and choked, time above each EGT band.\n"+
		"A start is a light-off below idle; one that is given up before idle is aborted; a cycle ends with a\n"+
		"shutdown after idle was reached; a hot start is one that exceeded a start band.\n"+
		"It is no substitute for the engine's log.", stderr)
	data := fs.String("data", "data", "data folder")
	nozzles := fs.Bool("nozzles", false, "of nozzles, not engines")
	asJSON := fs.Bool("json", false, "one JSON array")
	asCSV := fs.Bool("csv", false, "a row for each, with columns for each EGT band")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) > 1 || *asJSON && *asCSV {
		_, _ = fmt.Fprintln(stderr, "throatwatch life: give one serial number, or none for all; and one of --json and --csv")
		return 2
	}
	kind, named := "engine", func(serial string) bool { return len(rest) == 0 || serial == rest[0] }
	if *nozzles {
		kind = "nozzle"
	}
	lived, err := listLives(ctx, *data)
	lived.Engines = slices.DeleteFunc(lived.Engines, func(l pipeline.Life) bool { return !named(l.Serial) })
	lived.Nozzles = slices.DeleteFunc(lived.Nozzles, func(l pipeline.NozzleLife) bool { return !named(l.Serial) })
	lines := livesOf(&lived, *nozzles)
	if err == nil && len(rest) == 1 && len(lines) == 0 {
		err = fmt.Errorf("no %s %q was watched here; `throatwatch life` lists those that were", kind, rest[0])
	}
	switch {
	case err != nil:
	case *asJSON && *nozzles:
		err = printJSON(stdout, lived.Nozzles)
	case *asJSON:
		err = printJSON(stdout, lived.Engines)
	case *asCSV:
		err = writeLives(stdout, kind, lines)
	default:
		printLives(stdout, kind, lines)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch life:", err)
		return 1
	}
	return 0
}

func listLives(ctx context.Context, dir string) (lived watch.Lived, err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return lived, err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	return watch.Lives(ctx, dir, runs)
}

// lived is an engine or a nozzle with what it has been through.
type lived struct {
	serial string
	*pipeline.Counts
}

func livesOf(all *watch.Lived, nozzles bool) (out []lived) {
	if nozzles {
		for i := range all.Nozzles {
			out = append(out, lived{all.Nozzles[i].Serial, &all.Nozzles[i].Counts})
		}
		return out
	}
	for i := range all.Engines {
		serial := all.Engines[i].Serial
		if serial == "" {
			serial = "(no serial)"
		}
		out = append(out, lived{serial, &all.Engines[i].Counts})
	}
	return out
}

func printLives(stdout io.Writer, kind string, lives []lived) {
	if len(lives) == 0 {
		_, _ = fmt.Fprintf(stdout, "no %s was watched\n", kind)
		return
	}
	head := map[string]string{"engine": "ENGINE", "nozzle": "NOZZLE"}[kind]
	t := tabwriter.NewWriter(stdout, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, head+"\tSTARTS\tABORTED\tHOT\tHUNG\tNO LIGHT\tFLAME-OUTS\tCYCLES\tHOURS LIT\tHOURS CHOKED")
	for _, l := range lives {
		_, _ = fmt.Fprintf(t, "%s\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t%.2f\t%.2f\n",
			l.serial, l.Starts, l.Aborted, l.HotStarts, l.Hung, l.NoLights, l.FlameOuts, l.Cycles, l.Hours, l.HoursChoked)
	}
	_, _ = fmt.Fprintln(t, "\n"+head+"\tEGT BAND\tTIME ABOVE\tPEAK\tEXCURSIONS\tEXCEEDED")
	for _, l := range lives {
		for _, b := range l.Bands {
			peak := "–"
			if b.Peak.Known {
				peak = strconv.FormatFloat(b.Peak.V-273.15, 'f', 0, 64) + " °C"
			}
			_, _ = fmt.Fprintf(t, "%s\t%s\t%.1f s\t%s\t%d\t%d\n", l.serial, b.Name, b.Seconds, peak, b.Excursions, b.Exceedances)
		}
	}
	_ = t.Flush()
}

// writeLives writes lives as CSV: a row for each, four columns for each EGT band.
func writeLives(w io.Writer, kind string, lives []lived) error {
	head := []string{kind + "_serial", "starts", "aborted_starts", "hot_starts", "hung_starts", "no_lights", "flame_outs", "cycles", "hours", "hours_choked"}
	var bands []string
	for _, l := range lives {
		for _, b := range l.Bands {
			if !slices.Contains(bands, b.Name) {
				bands = append(bands, b.Name)
			}
		}
	}
	for _, b := range bands {
		head = append(head, b+"_s", b+"_peak_k", b+"_excursions", b+"_exceedances")
	}
	whole := func(n uint64) string { return strconv.FormatUint(n, 10) }
	real := func(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }
	rows := [][]string{head}
	for _, l := range lives {
		row := []string{
			l.serial, whole(l.Starts), whole(l.Aborted), whole(l.HotStarts), whole(l.Hung), whole(l.NoLights), whole(l.FlameOuts), whole(l.Cycles),
			real(l.Hours), real(l.HoursChoked),
		}
		for _, name := range bands {
			i := slices.IndexFunc(l.Bands, func(b pipeline.BandLife) bool { return b.Name == name })
			if i < 0 {
				row = append(row, "", "", "", "")
				continue
			}
			b, peak := &l.Bands[i], ""
			if b.Peak.Known {
				peak = real(b.Peak.V)
			}
			row = append(row, real(b.Seconds), peak, whole(b.Excursions), whole(b.Exceedances))
		}
		rows = append(rows, row)
	}
	return csv.NewWriter(w).WriteAll(rows)
}
