package corpus

import (
	"encoding/json"
	"fmt"
	"io"
	"math"
	"strings"
	"time"

	"throatwatch/rules"
)

// Row is what was measured of one rule.
type Row struct {
	Rule  string
	Naive bool
	Text  string // what a naive rule compares
	Count
	priority rules.Priority
}

// Report is what was measured.
type Report struct {
	Seed    uint64
	Rows    []Row // as in the rig file
	Naive   []Row
	Hours   float64 // without a reason for a warning or caution
	Scans   uint64
	Runs    int
	Mishaps []string // what was missed, late, false or chattering, by run
}

// mostMishaps bounds the list of mishaps; all are counted.
const mostMishaps = 1000

func (r *Report) add(kind string, n int, res *result) {
	r.Runs++
	r.Hours += res.hours
	r.Scans += res.scans
	for i := range res.rules {
		r.Rows[i].add(res.rules[i])
	}
	for i := range res.naive {
		r.Naive[i].add(res.naive[i])
	}
	for _, m := range res.mishaps {
		if len(r.Mishaps) < mostMishaps {
			r.Mishaps = append(r.Mishaps, fmt.Sprintf("%s run %d at %v: %s %s", kind, n, time.Duration(m.At).Round(time.Millisecond), m.Rule, m.What))
		}
	}
}

// judged tells whether truth has anything to say of a row: notes are no alarms, and
// an advisory without events is not measured.
func (r *Row) judged() bool { return r.priority > rules.Advisory || r.Expected > 0 }

// Failed tells whether an alarm of the rig was missed, false or chattering.
func (r *Report) Failed() bool {
	for i := range r.Rows {
		if row := &r.Rows[i]; row.judged() && row.Missed+row.False+row.Chattering > 0 {
			return true
		}
	}
	return false
}

// WriteJSON writes one object per line and rule.
func (r *Report) WriteJSON(w io.Writer) error {
	e := json.NewEncoder(w)
	for _, rows := range [][]Row{r.Rows, r.Naive} {
		for i := range rows {
			row := &rows[i]
			if !row.judged() {
				continue
			}
			err := e.Encode(struct {
				Rule       string  `json:"rule"`
				Naive      bool    `json:"naive,omitempty"`
				Text       string  `json:"compares,omitempty"`
				Priority   string  `json:"priority,omitempty"`
				Expected   int     `json:"expected"`
				Detected   int     `json:"detected"`
				Missed     int     `json:"missed"`
				False      int     `json:"false"`
				Chattering int     `json:"chattering"`
				Delay      int64   `json:"delay_scans_max"`
				Hours      float64 `json:"calm_hours"`
			}{row.Rule, row.Naive, row.Text, row.name(), row.Expected, row.Detected, row.Missed, row.False, row.Chattering, row.Delay, math.Round(10*r.Hours) / 10})
			if err != nil {
				return fmt.Errorf("corpus: %w", err)
			}
		}
	}
	return nil
}

func (r *Row) name() string {
	if r.Naive {
		return ""
	}
	return r.priority.String()
}

// below gives the upper bound at 95 % of a rate of which zero were seen in n, by the
// rule of three.
func below(n float64) float64 { return 3 / n }

// WriteTable writes the table for people, in Markdown.
func (r *Report) WriteTable(w io.Writer) error {
	var b strings.Builder
	b.WriteString("# Alarms measured\n\nWritten by `deploy/alarm-corpus`: rehearsals on the example rig, every alarm judged by the truth behind the readings. An event\n" +
		"that exceeds its limit by more than U95 for longer than the on-delay must alarm within lateness and two scans (5 scans here);\n" +
		"what stays below by more than U95 must not.\n\n")
	b.WriteString("| rule | priority | events | detected | missed | false | chattering | slowest, scans |\n|---|---|---|---|---|---|---|---|\n")
	least, rule := math.MaxInt, ""
	for _, rows := range [][]Row{r.Rows, r.Naive} {
		for i := range rows {
			row := &rows[i]
			if !row.judged() {
				continue
			}
			name, priority := "`"+row.Rule+"`", row.name()
			if row.Naive {
				name, priority = name+": "+row.Text, "naive"
			} else if row.priority == rules.Warning && row.Expected < least {
				least, rule = row.Expected, row.Rule
			}
			fmt.Fprintf(&b, "| %s | %s | %d | %d | %d | %d | %d | %d |\n", name, priority, row.Expected, row.Detected, row.Missed, row.False, row.Chattering, row.Delay)
		}
	}
	fmt.Fprintf(&b, "\nSeed %d: %d runs, %.4g million scans, %.0f h of them without a reason for a warning or caution.\n", r.Seed, r.Runs, float64(r.Scans)/1e6, r.Hours)
	if least > 0 && r.Hours > 0 {
		fmt.Fprintf(&b, "None of n proves at 95 %% a rate below 3/n: with %d events (%s) less than %.2g %% missed, with %.0f h less than %.2g false alarms per hour,\nof events and readings like these.\n",
			least, rule, 100*below(float64(least)), r.Hours, below(r.Hours))
	}
	_, err := io.WriteString(w, b.String())
	if err != nil {
		return fmt.Errorf("corpus: %w", err)
	}
	return nil
}
