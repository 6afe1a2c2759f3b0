package main

import (
	"context"
	"fmt"
	"io"
	"net/url"
	"strconv"
	"strings"
	"time"

	"throatwatch/dashboard"
	"throatwatch/monitor/check"
	"throatwatch/rules"
)

// handoverCommand prints the hand-over sheet of a running watch.
func handoverCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("handover", "The hand-over sheet of a running watch: alarms that stand or are put aside, open points of the\n"+
		"test card, limits and configuration in force, what was noted. To be read by who takes over.", stderr)
	to := remoteFlags(fs)
	asJSON := fs.Bool("json", false, "JSON")
	rest, code := parseArgs(fs, args, stderr)
	switch {
	case code >= 0:
		return code
	case len(rest) > 0:
		_, _ = fmt.Fprintln(stderr, "throatwatch handover: give no argument; --url says which watch")
		return 2
	}
	var h dashboard.Handover
	r, err := to(ctx)
	if err == nil {
		query := ""
		if r.by != "" {
			query = "?by=" + url.QueryEscape(r.by)
		}
		err = r.get(ctx, "/handover"+query, &h)
	}
	if err == nil && *asJSON {
		err = printJSON(stdout, h)
	} else if err == nil {
		printHandover(stdout, &h)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch handover:", err)
		return 1
	}
	return 0
}

func printHandover(w io.Writer, h *dashboard.Handover) {
	zone := h.Rig.Zone()
	line := func(format string, args ...any) { _, _ = fmt.Fprintf(w, format+"\n", args...) }
	line("HAND-OVER SHEET  %s, %s %s, by %s", phrase(h.Rig.Title, h.Rig.ID), stamp(h.T, zone), zoneName(zone), oneLine(h.By))
	line("Engine   %s", phrase(h.Rig.EngineModel, named("serial ", h.Rig.EngineSerial), named("build ", h.Rig.EngineBuild), named("nozzle ", h.Rig.NozzleSerial)))
	if h.Run == nil {
		line("Run      none is on")
	} else {
		line("Run      %s", h.Run.ID)
	}
	approval := "not approved"
	if h.Config.ApprovedBy != "" {
		approval = "approved by " + h.Config.ApprovedBy
	}
	line("Limits   %s; files %.12s, %s", phrase(h.LimitsVersion), h.Config.Hash, phrase(named("changed by ", h.Config.By), approval))
	if why := h.Config.Refused.Why; why != "" {
		line("         files were refused at %s: %s", stamp(h.Config.Refused.T, zone), oneLine(why))
	}
	for _, g := range []struct {
		name string
		list []rules.Alarm
	}{{"Alarms standing", h.Alarms.Standing}, {"Shelved", h.Alarms.Shelved}, {"Out of service", h.Alarms.OutOfService}, {"Suppressed by design", h.Alarms.Suppressed}} {
		line("\n%s: %s", g.name, counted(len(g.list)))
		for i := range g.list {
			a := &g.list[i]
			line("  %-8s  %s, %s%s", a.Priority, oneLine(a.Title), strings.ReplaceAll(a.State.String(), "_", " "), aside(a, zone))
		}
	}
	line("\nCalibrations expired: %s", counted(len(h.Waivers)))
	for _, v := range h.Waivers {
		answers := "nobody answers for it"
		if v.Who != "" {
			answers = phrase("waived by "+oneLine(v.Who), oneLine(v.Why), named("until ", v.Until))
		}
		line("  %s", phrase(v.Channel, named("sensor ", v.Serial), "due "+v.Due, answers))
	}
	line("\nTest card: %s", cardLeft(h.Card))
	line("")
	for _, c := range []struct {
		name string
		is   *check.Result
	}{{"Checks before the run", h.Checks.Before}, {"Checks after the run", h.Checks.After}} {
		line("%s: %s", c.name, checked(c.is, zone))
	}
	line("\nNotes: %s", counted(len(h.Notes)))
	for i := range h.Notes {
		e := &h.Notes[i]
		line("  %s  %s  %s (%s)", stamp(e.T, zone), phrase(strings.ReplaceAll(e.What, "_", " "), e.Rule+e.Channel+e.Name, entered(e, zone), oneLine(e.Reason)), oneLine(e.By), e.Role)
	}
	line("\n%s", notProtection)
}

func counted(n int) string {
	if n == 0 {
		return "none"
	}
	return strconv.Itoa(n)
}

// checked says how a check of the data system ended, with what did not pass.
func checked(c *check.Result, zone *time.Location) string {
	if c == nil {
		return "none was made"
	}
	lines := []string{phrase(stamp(c.Ended, zone), "by "+oneLine(c.By), strings.ReplaceAll(c.State, "_", " ")) + ". " + c.Summary}
	for i := range c.Items {
		if it := &c.Items[i]; !it.Passed {
			lines = append(lines, "  "+oneLine(it.Title+": "+it.Text))
		}
	}
	return strings.Join(lines, "\n")
}

// aside says who put an alarm aside, why and until when.
func aside(a *rules.Alarm, zone *time.Location) string {
	text := named(" by ", oneLine(a.AsideBy)) + named(": ", oneLine(a.Reason))
	if a.Until != 0 {
		text += ", until " + stamp(a.Until, zone)
	}
	return text
}

func cardLeft(c *dashboard.OpenCard) string {
	if c == nil {
		return "none is in force"
	}
	list := func(what string, names []string) string { return named(what, strings.Join(names, ", ")) }
	var awaiting []string
	for _, n := range c.Awaiting {
		awaiting = append(awaiting, strconv.FormatUint(n, 10))
	}
	left := "nothing is open"
	if len(c.Open) > 0 {
		left = list("open: ", c.Open)
	}
	return phrase(strings.TrimSpace(c.Number+" "+c.Revision), c.Title) + "; " + phrase(left, list("skipped: ", c.Skipped), list("to be accepted or rejected: ", awaiting))
}
