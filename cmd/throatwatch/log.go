package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"throatwatch/dashboard"
	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/figures"
	"throatwatch/rules/pipeline"
)

func logCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	return aboutRun(ctx, args, stdout, stderr,
		"log", "The operator log of a stored run: what people did, who, when and why.", dashboard.ReadLog, printLog)
}

func figuresCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	return aboutRun(ctx, args, stdout, stderr,
		"figures", "How the alarms of a stored run did, against published targets. A worsening that asks again counts\n"+
			"as raised; notes are left out. Runs shorter than an hour are not graded.", dashboard.ReadFigures, printFigures)
}

// aboutRun is a command that reads something of a stored run and prints it.
func aboutRun[T any](
	ctx context.Context, args []string, stdout, stderr io.Writer, name, what string,
	read func(context.Context, *runfile.File, *runfile.Header) (T, error), show func(io.Writer, T, *time.Location),
) int {
	fs := newFlags(name+" RUN", what, stderr)
	data := fs.String("data", "data", "data folder")
	asJSON := fs.Bool("json", false, "JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintf(stderr, "throatwatch %s: give one run; `throatwatch runs` lists them\n", name)
		return 2
	}
	zone := time.UTC
	v, err := ofRun(ctx, *data, rest[0], func(ctx context.Context, f *runfile.File, h *runfile.Header) (T, error) {
		zone = zoneOf(h.TimeZone)
		return read(ctx, f, h)
	})
	var text []byte
	if err == nil && *asJSON {
		text, err = json.MarshalIndent(v, "", "  ")
	}
	switch {
	case err != nil:
		_, _ = fmt.Fprintf(stderr, "throatwatch %s: %v\n", name, err)
		return 1
	case *asJSON:
		_, _ = fmt.Fprintf(stdout, "%s\n", text)
	default:
		show(stdout, v, zone)
	}
	return 0
}

func ofRun[T any](ctx context.Context, dir, id string, read func(context.Context, *runfile.File, *runfile.Header) (T, error)) (v T, err error) {
	f, done, err := openRun(ctx, dir, id)
	if err != nil {
		return v, err
	}
	defer func() { err = errors.Join(err, done()) }()
	h, err := f.Header(ctx)
	if err != nil {
		return v, err
	}
	return read(ctx, f, &h)
}

func printLog(w io.Writer, entries []pipeline.Entry, zone *time.Location) {
	if len(entries) == 0 {
		_, _ = fmt.Fprintln(w, "nobody entered anything")
		return
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "TIME ("+zoneName(zone)+")\tWHAT\tOF\tENTERED\tREASON\tBY")
	for i := range entries {
		e := &entries[i]
		_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s (%s)\n", stamp(e.T, zone), strings.ReplaceAll(e.What, "_", " "),
			e.Rule+e.Channel+e.Name, entered(e, zone), oneLine(e.Reason), oneLine(e.By), e.Role)
	}
	_ = t.Flush()
}

// entered says what an entry carries beside its reason.
func entered(e *pipeline.Entry, zone *time.Location) string {
	var parts []string
	if e.Value.Known {
		parts = append(parts, strings.TrimSpace(strconv.FormatFloat(e.Value.V, 'g', -1, 64)+" "+e.Unit))
	}
	if e.Serial != "" {
		parts = append(parts, "sensor "+e.Serial+" from "+stamp(e.ValidFrom, zone))
	}
	if e.Calibration != "" {
		parts = append(parts, "with "+oneLine(e.Calibration))
	}
	if e.Text != "" {
		parts = append(parts, oneLine(e.Text))
	}
	return strings.Join(parts, ", ")
}

// oneLine keeps what somebody typed from breaking a table.
func oneLine(s string) string { return strings.Join(strings.Fields(s), " ") }

// stamp writes a time for people, with the offset to UTC where the zone is another.
func stamp(t rules.Time, zone *time.Location) string {
	at := time.Unix(0, int64(t)).In(zone)
	if _, offset := at.Zone(); offset == 0 && zoneName(zone) == "UTC" {
		return at.Format("2006-01-02 15:04:05")
	}
	return at.Format("2006-01-02 15:04:05 -07:00")
}

// zoneOf gives the time zone of a name, UTC where there is none.
func zoneOf(name string) *time.Location {
	rig := pipeline.RigInfo{TimeZone: name}
	return rig.Zone()
}

// zoneName names a zone in a table's head.
func zoneName(zone *time.Location) string {
	if zone.String() == "Etc/UTC" {
		return "UTC"
	}
	return zone.String()
}

func printFigures(w io.Writer, f figures.Figures, zone *time.Location) {
	targets := map[string]figures.Target{}
	for _, g := range f.Targets {
		targets[g.Figure] = g
	}
	number := func(v *float64, format string) string {
		if v == nil {
			return "–"
		}
		return fmt.Sprintf(format, *v)
	}
	_, _ = fmt.Fprintf(w, "%s to %s %s, %v\n\n", stamp(f.From, zone), stamp(f.To, zone), zoneName(zone), time.Duration(f.Seconds*1e9).Round(time.Second))
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "FIGURE\tOF THIS RUN\tTARGET\t")
	row := func(name, value, key, bound string) {
		met, target := "", ""
		if g, ok := targets[key]; ok {
			target = bound + strconv.FormatFloat(g.Target, 'g', -1, 64)
			switch {
			case g.Met == nil:
				met = "not graded"
			case *g.Met:
				met = "met"
			default:
				met = "not met"
			}
		}
		_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\n", name, value, target, met)
	}
	row("raised", strconv.Itoa(f.Raised), "", "")
	row("raised per 10 min, mean", number(f.Per10Min, "%.2f"), "per_10_min", "≤ ")
	peak := strconv.Itoa(f.Peak10Min)
	if f.PeakAt != 0 {
		peak += " at " + stamp(f.PeakAt, zone)
	}
	row("raised in 10 min, most", peak, "peak_10_min", "≤ ")
	row("standing now", strconv.Itoa(f.StandingNow), "", "")
	row("standing, most", strconv.Itoa(f.StandingPeak), "", "")
	row("standing, mean", number(f.StandingMean, "%.2f"), "standing_mean", "< ")
	row("standing for a day", strconv.Itoa(f.Stale), "stale", "≤ ")
	row("chattering", strconv.Itoa(len(f.Chattering)), "chattering", "≤ ")
	row("shelved", strconv.Itoa(f.Shelved), "", "")
	row("out of service", strconv.Itoa(f.OutOfService), "", "")
	row("acknowledged after, median", number(f.AckMedian, "%.1f s"), "", "")
	for _, p := range []struct {
		p     rules.Priority
		bound string
	}{{rules.Warning, "≤ "}, {rules.Caution, "≤ "}, {rules.Advisory, "≥ "}} {
		s := f.ByPriority[p.p.String()]
		value := strconv.Itoa(s.Raised)
		if s.Share != nil {
			value += fmt.Sprintf(" (%.2f of all)", *s.Share)
		}
		row(p.p.String(), value, "share_"+p.p.String(), p.bound)
	}
	_ = t.Flush()
	_, _ = fmt.Fprintln(w)
	for _, c := range f.Chattering {
		_, _ = fmt.Fprintf(w, "Chattering: %s, raised %d times in a minute.\n", c.Rule, c.Times)
	}
	if f.WhyNot != nil {
		_, _ = fmt.Fprintf(w, "Not graded: %s.\n", *f.WhyNot)
	}
	_, _ = fmt.Fprintln(w, "Targets:")
	for _, g := range f.Targets {
		_, _ = fmt.Fprintf(w, "  %-14s  %s\n", g.Figure, g.Source)
	}
}
