package main

import (
	"context"
	"encoding/json"
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
	fs := newFlags("life [SERIAL]", "What each engine has been through, as far as it was watched: starts and how they went,\n"+
		"cycles, hours with a flame, time above each EGT band.\n"+
		"A start is a light-off below idle; a cycle ends with a shutdown after idle was reached;\n"+
		"a hot start is one that exceeded a start band. It is no substitute for the engine's log.", stderr)
	data := fs.String("data", "data", "data folder")
	asJSON := fs.Bool("json", false, "one JSON array")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) > 1 {
		_, _ = fmt.Fprintln(stderr, "throatwatch life: give one serial number, or none for all engines")
		return 2
	}
	lives, err := listLives(ctx, *data)
	if err == nil && len(rest) == 1 {
		lives = slices.DeleteFunc(lives, func(l pipeline.Life) bool { return l.Serial != rest[0] })
		if len(lives) == 0 {
			err = fmt.Errorf("no engine %q was watched here; `throatwatch life` lists those that were", rest[0])
		}
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch life:", err)
		return 1
	}
	if *asJSON {
		b, err := json.MarshalIndent(lives, "", "  ")
		if err != nil {
			_, _ = fmt.Fprintln(stderr, "throatwatch life:", err)
			return 1
		}
		_, _ = fmt.Fprintf(stdout, "%s\n", b)
		return 0
	}
	printLives(stdout, lives)
	return 0
}

func listLives(ctx context.Context, dir string) (lives []pipeline.Life, err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	return watch.Lives(ctx, dir, runs)
}

func printLives(stdout io.Writer, lives []pipeline.Life) {
	if len(lives) == 0 {
		_, _ = fmt.Fprintln(stdout, "no engine was watched")
		return
	}
	t := tabwriter.NewWriter(stdout, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "ENGINE\tSTARTS\tHOT\tHUNG\tNO LIGHT\tFLAME-OUTS\tCYCLES\tHOURS LIT")
	for i := range lives {
		l := &lives[i]
		_, _ = fmt.Fprintf(t, "%s\t%d\t%d\t%d\t%d\t%d\t%d\t%.2f\n", serial(l), l.Starts, l.HotStarts, l.Hung, l.NoLights, l.FlameOuts, l.Cycles, l.Hours)
	}
	_, _ = fmt.Fprintln(t, "\nENGINE\tEGT BAND\tTIME ABOVE\tPEAK\tEXCURSIONS\tEXCEEDED")
	for i := range lives {
		for _, b := range lives[i].Bands {
			peak := "–"
			if b.Peak.Known {
				peak = strconv.FormatFloat(b.Peak.V-273.15, 'f', 0, 64) + " °C"
			}
			_, _ = fmt.Fprintf(t, "%s\t%s\t%.1f s\t%s\t%d\t%d\n", serial(&lives[i]), b.Name, b.Seconds, peak, b.Excursions, b.Exceedances)
		}
	}
	_ = t.Flush()
}

func serial(l *pipeline.Life) string {
	if l.Serial == "" {
		return "(no serial)"
	}
	return l.Serial
}
