package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/rules/pipeline"
)

// doctorWithin bounds all examinations together.
const doctorWithin = 2 * time.Minute

// verdict is what became of an examination.
type verdict string

// The verdicts. A warning is for a person to weigh; what failed keeps a watch from
// its work.
const (
	passed  verdict = "passed"
	warning verdict = "warning"
	failed  verdict = "failed"
)

// finding is what an examination found.
type finding struct {
	Of      string  `json:"of"`
	Verdict verdict `json:"verdict"`
	Found   string  `json:"found"`
	Do      string  `json:"do,omitempty"` // where it did not pass
}

// doctor examines a machine for a watch.
type doctor struct {
	opt   watchOptions
	cfg   *pipeline.Config // nil without a rig file that has no fault
	tell  func(finding)
	found []finding
	runs  bool // a watch runs on the data folder
}

func (d *doctor) add(of string, v verdict, found, do string) {
	f := finding{Of: of, Verdict: v, Found: found, Do: do}
	d.found = append(d.found, f)
	d.tell(f)
}

// fail adds what failed; nothing for no error.
func (d *doctor) fail(of string, err error, do string) bool {
	if err != nil {
		d.add(of, failed, err.Error(), do)
	}
	return err != nil
}

// doctorCommand examines what a watch with the same flags would live on. It gives 0
// when nothing failed, 1 when something did, 2 when called wrongly.
func doctorCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	var o watchOptions
	var asJSON bool
	fs := newFlags("doctor [RIG.yaml]", "Look at disk, clock, ports, broker, database, users and certificates, as a watch with the same flags would\n"+
		"find them. It can run beside a watch: it publishes below throatwatch/probe/doctor/ only, and puts one point of\nmeasurement \"check\" into the database.", stderr)
	o.flags(fs)
	fs.BoolVar(&asJSON, "json", false, "print JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	err := o.check(fs)
	if len(rest) > 1 {
		err = fmt.Errorf("give one rig file, or none (%d arguments were given)", len(rest))
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch doctor:", err)
		return 2
	}
	ctx, cancel := context.WithTimeout(ctx, doctorWithin)
	defer cancel()
	d := &doctor{opt: o, tell: func(f finding) {
		if !asJSON {
			f.print(stdout)
		}
	}}
	d.examine(ctx, fs, rest)
	bad := count(d.found, failed)
	if asJSON {
		enc := json.NewEncoder(stdout)
		enc.SetIndent("", "  ")
		enc.SetEscapeHTML(false)
		_ = enc.Encode(struct {
			Failed   int       `json:"failed"`
			Warnings int       `json:"warnings"`
			Findings []finding `json:"findings"`
		}{bad, count(d.found, warning), d.found})
	} else {
		_, _ = fmt.Fprintf(stdout, "\n%d of %d examinations passed, %d warnings, %d failed. Not a clearance to start. %s\n",
			count(d.found, passed), len(d.found), count(d.found, warning), bad, notProtection)
	}
	if bad > 0 {
		return 1
	}
	return 0
}

func count(all []finding, v verdict) (n int) {
	for i := range all {
		if all[i].Verdict == v {
			n++
		}
	}
	return n
}

// print writes a finding as a line of the table, and below it what to do.
func (f *finding) print(w io.Writer) {
	lines := strings.Split(f.Found, "\n")
	if f.Do != "" {
		lines = append(lines, "→ "+f.Do)
	}
	_, _ = fmt.Fprintf(w, "%-7s  %-15s  %s\n", f.Verdict, f.Of, lines[0])
	for _, line := range lines[1:] {
		_, _ = fmt.Fprintf(w, "%-7s  %-15s  %s\n", "", "", line)
	}
}

// examine goes through all that a watch needs, whatever fails before.
func (d *doctor) examine(ctx context.Context, fs *pflag.FlagSet, rig []string) {
	clock := seeClock()
	if len(rig) == 1 {
		d.rig(rig[0])
	}
	d.folder(ctx)
	d.pageAddress(ctx)
	d.broker(ctx)
	d.database(ctx)
	d.webhook(ctx)
	d.users()
	d.certificates(fs, time.Now())
	d.clock(clock, seeClock()) // last, so that a step has had time to come
}

func (d *doctor) rig(path string) {
	_, cfg, faults := config.Load(path)
	if d.fail("rig file", watch.Faults(faults), "correct the file; throatwatch check "+path+" shows it whole") {
		return
	}
	d.cfg = &cfg
	d.add("rig file", passed, fmt.Sprintf("%s: %s, %d channels, %d rules", path, cfg.Rig.ID, len(cfg.Compute.Channels), len(cfg.Rules)), "")
}

// clockSeen is a look at the clock: wall and monotonic time together.
type clockSeen struct {
	at   time.Time
	wall int64 // ns UTC
}

func seeClock() clockSeen {
	now := time.Now()
	return clockSeen{at: now, wall: now.UnixNano()}
}

// passedSince gives the time since another look, and by how much the wall clock was
// put meanwhile.
func (c clockSeen) passedSince(began clockSeen) (passed, stepped time.Duration) {
	passed = c.at.Sub(began.at) // monotonic
	return passed, time.Duration(c.wall-began.wall) - passed
}

// mostStep is by how much a clock that is only slewed can go otherwise within an
// examination.
const mostStep = 50 * time.Millisecond

func (d *doctor) clock(began, now clockSeen) {
	const of = "clock"
	within, by := now.passedSince(began)
	if by.Abs() > mostStep {
		d.add(of, failed, fmt.Sprintf("the wall clock was put by %v within %v", by.Round(time.Millisecond), within.Round(time.Millisecond)),
			"let the time service slew it, not step it, and look for two programs that set it")
		return
	}
	synchronised, what, err := ntp()
	switch {
	case err != nil:
		d.add(of, warning, "whether a time service keeps it is not known: "+err.Error(), "see that one does")
	case !synchronised:
		d.add(of, warning, "no time service keeps it: "+what, "set one up (chrony, systemd-timesyncd), with the server that the data system has: device times are compared with this clock")
	default:
		d.add(of, passed, what+"; no step within "+within.Round(time.Millisecond).String(), "")
	}
}

// folder looks at the data folder: space, right to write, time of a commit.
func (d *doctor) folder(ctx context.Context) {
	at := d.opt.data
	for { // what is not there yet is made by a watch, on the disk of what is
		if _, err := os.Stat(at); err == nil || !errors.Is(err, os.ErrNotExist) || filepath.Dir(at) == at {
			break
		}
		at = filepath.Dir(at)
	}
	if at == d.opt.data {
		if _, err := os.Stat(filepath.Join(at, "lock")); err == nil {
			unlock, err := watch.Lock(at)
			d.runs = errors.Is(err, watch.ErrLocked)
			if err == nil {
				unlock()
			}
		}
	}
	const of = "disk space"
	free, err := watch.FreeSpace(at)
	if !d.fail(of, err, "give a folder by --data that this user can reach") {
		if found := fmt.Sprintf("%.1f GB free in %s", free/1e9, at); free < d.opt.diskGB*1e9 {
			d.add(of, warning, fmt.Sprintf("%s, fewer than the %g GB of --disk-gb", found, d.opt.diskGB), "make room, move old runs away, or let --retain-days or --retain-gb remove them")
		} else {
			d.add(of, passed, found, "")
		}
	}
	d.commits(ctx, at)
}

const (
	trialCommits = 64
	trialBytes   = 4096
	// slowCommit is the time between commits: a median above it lets records gather.
	slowCommit = 20 * time.Millisecond
	// lateCommit is when a watch says that it does not record.
	lateCommit = time.Second
)

// commits measures what a commit waits for: bytes written and fsync.
func (d *doctor) commits(ctx context.Context, dir string) {
	const of = "disk writing"
	took, err := timeCommits(ctx, dir)
	if d.fail(of, err, "give this user the right to write to "+dir+", or remount the disk for writing") {
		return
	}
	slices.Sort(took)
	median, slowest := took[len(took)/2], took[len(took)-1]
	found := fmt.Sprintf("%d writes of %d B with fsync: median %.1f ms, slowest %.1f ms", len(took), trialBytes, ms(median), ms(slowest))
	const do = "keep other programs off this disk, or give runs a faster one"
	switch {
	case slowest > lateCommit:
		d.add(of, failed, found+fmt.Sprintf("; a watch says \"not recording\" beyond %.0f ms", ms(lateCommit)), do)
	case median > slowCommit:
		d.add(of, warning, found+fmt.Sprintf("; a watch commits each %.0f ms", ms(slowCommit)), do)
	default:
		d.add(of, passed, found, "")
	}
	if kind := farDisk(dir); kind != "" {
		d.add("disk kind", failed, dir+" is on "+kind+", where the locks of run files do not hold", "give a folder on a disk of this machine")
	}
}

func ms(d time.Duration) float64 { return float64(d) / 1e6 }

func timeCommits(ctx context.Context, dir string) (took []time.Duration, err error) {
	f, err := os.CreateTemp(dir, "doctor-*")
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, f.Close(), os.Remove(f.Name())) }()
	block := make([]byte, trialBytes)
	for range trialCommits {
		began := time.Now()
		if _, err := f.Write(block); err != nil {
			return nil, err
		}
		if err := f.Sync(); err != nil {
			return nil, err
		}
		took = append(took, time.Since(began))
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
	}
	return took, nil
}
