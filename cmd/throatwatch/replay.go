package main

import (
	"bufio"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"text/tabwriter"
	"time"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// openRuns opens the list of the runs in a data folder for reading.
func openRuns(ctx context.Context, dir string) (watch.StoredRuns, error) {
	if info, err := os.Stat(filepath.Join(dir, "runs")); err != nil || !info.IsDir() {
		return watch.StoredRuns{}, fmt.Errorf("%s holds no runs: give the folder of a watch by --data", dir)
	}
	c, err := runfile.OpenCatalog(ctx, filepath.Join(dir, "catalog.db"), filepath.Join(dir, "runs"))
	if err != nil {
		return watch.StoredRuns{}, err
	}
	return watch.StoredRuns{Catalog: c}, nil
}

// runLine is a run as `runs --json` prints it.
type runLine struct {
	ID           string   `json:"id"`
	Number       uint64   `json:"number"`
	Rig          string   `json:"rig"`
	Engine       string   `json:"engine"`
	EngineSerial string   `json:"engine_serial"`
	Started      string   `json:"started"`
	Ended        *string  `json:"ended"`
	DurationS    *float64 `json:"duration_s"`
	State        string   `json:"state"`
	Alarms       int      `json:"alarms"`
	SizeBytes    int64    `json:"size_bytes"`
	Keep         bool     `json:"keep"`
	Tags         []string `json:"tags"`
	Notes        string   `json:"notes"`
	ConfigHash   string   `json:"config_hash"`
	Build        string   `json:"build"`
	Digest       string   `json:"digest"`

	Parent       string `json:"parent,omitempty"` // of a reduction
	ParentDigest string `json:"parent_digest,omitempty"`
	ReducedBy    string `json:"reduced_by,omitempty"`
	TimeZone     string `json:"time_zone"` // of the facility, "" = UTC

	Designation  string `json:"designation"` // number by the rig file's scheme, "" = none
	Test         string `json:"test"`
	Purpose      string `json:"purpose"`
	EngineBuild  string `json:"engine_build"`
	NozzleSerial string `json:"nozzle_serial"`
	FuelBatch    string `json:"fuel_batch"`
	Aborted      bool   `json:"aborted"` // its start did not reach idle

	started rules.Time

	EffectiveArea    *float64 `json:"effective_area_m2"` // mean over steady choked scans
	EffectiveAreaU95 *float64 `json:"effective_area_m2_u95"`
	AreaDrift        *float64 `json:"area_drift_percent"` // since the run before of this engine
	AreaDriftU95     *float64 `json:"area_drift_percent_u95"`
}

func runsCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("runs", "List the stored runs, newest first.", stderr)
	data := fs.String("data", "data", "data folder")
	asJSON := fs.Bool("json", false, "one JSON array")
	find := fs.String("find", "", "only runs with this text in what is known of them: rig, engine, serial, notes, tags")
	tag := fs.String("tag", "", "only runs with this tag")
	if rest, code := parseArgs(fs, args, stderr); code >= 0 {
		return code
	} else if len(rest) > 0 {
		_, _ = fmt.Fprintln(stderr, "throatwatch runs: takes no arguments")
		return 2
	}
	list, err := listRuns(ctx, *data, runfile.Filter{Text: *find, Tag: *tag})
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch runs:", err)
		return 1
	}
	if *asJSON {
		b, err := json.MarshalIndent(list, "", "  ")
		if err != nil {
			_, _ = fmt.Fprintln(stderr, "throatwatch runs:", err)
			return 1
		}
		_, _ = fmt.Fprintf(stdout, "%s\n", b)
		return 0
	}
	t := tabwriter.NewWriter(stdout, 0, 0, 2, ' ', 0)
	started := "STARTED (UTC)"
	if slices.ContainsFunc(list, func(r runLine) bool { return zoneName(zoneOf(r.TimeZone)) != "UTC" }) {
		started = "STARTED (FACILITY)"
	}
	_, _ = fmt.Fprintln(t, "RUN\tNUMBER\tENGINE\t"+started+"\tLENGTH\tALARMS\tSTATE\tSIZE\tEFFECTIVE AREA\tDRIFT")
	for _, r := range list {
		length := "–"
		if r.DurationS != nil {
			length = time.Duration(*r.DurationS * 1e9).Round(time.Second).String()
		}
		id := r.ID
		if r.Parent != "" {
			id = "  of it: " + id
		}
		_, _ = fmt.Fprintf(t, "%s\t%s\t%s %s\t%s\t%s\t%d\t%s\t%.1f MB\t%s\t%s\n", id, cmp.Or(r.Designation, "–"), r.Engine, r.EngineSerial,
			stamp(r.started, zoneOf(r.TimeZone)), length, r.Alarms, stateOf(&r), float64(r.SizeBytes)/1e6,
			measure(r.EffectiveArea, r.EffectiveAreaU95, 1e4, "%.2f", "cm²"), measure(r.AreaDrift, r.AreaDriftU95, 1, "%+.2f", "%"))
	}
	_ = t.Flush()
	if len(list) == 0 {
		_, _ = fmt.Fprintln(stdout, "no such runs are stored")
	}
	return 0
}

// stateOf says how a run stands.
func stateOf(r *runLine) string {
	if r.Aborted {
		return r.State + ", start aborted"
	}
	return r.State
}

func listRuns(ctx context.Context, dir string, filter runfile.Filter) (list []runLine, err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	all, err := runs.List(ctx, filter)
	if err != nil {
		return nil, err
	}
	all = runfile.Families(all)
	list = []runLine{}
	for i := range all {
		r := &all[i]
		line := runLine{
			ID: r.ID, Number: r.Number, Rig: r.Rig, Engine: r.Engine, EngineSerial: r.EngineSerial,
			Started: time.Unix(0, r.Started).UTC().Format(time.RFC3339Nano), State: r.State, Alarms: r.Alarms,
			SizeBytes: r.Size, TimeZone: r.TimeZone, started: rules.Time(r.Started), Keep: r.Keep, Tags: append([]string{}, r.Tags...), Notes: r.Notes, ConfigHash: r.ConfigHash, Build: r.Build, Digest: r.Digest,
			Designation: r.Designation, Test: r.Test, Purpose: r.Purpose, EngineBuild: r.EngineBuild, NozzleSerial: r.NozzleSerial, FuelBatch: r.FuelBatch, Aborted: r.Aborted,
		}
		if o := r.Reduction(); o != nil {
			line.Parent, line.ParentDigest, line.ReducedBy = o.Parent, o.ParentDigest, o.By
		}
		if r.Ended != 0 {
			ended, length := time.Unix(0, r.Ended).UTC().Format(time.RFC3339Nano), float64(r.Ended-r.Started)/1e9
			line.Ended, line.DurationS = &ended, &length
		}
		list = append(list, line)
	}
	return list, drifts(ctx, runs, all, list)
}

func replayCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("replay RUN", "Step the records of a stored run again through the same computation.\n"+
		"Prints a SHA-256 over its operating points and alarm transitions on standard error.", stderr)
	data := fs.String("data", "data", "data folder")
	asJSON := fs.Bool("json", false, "print one operating point of the run per line, as in the live frames")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintln(stderr, "throatwatch replay: give one run; `throatwatch runs` lists them")
		return 2
	}
	if err := replay(ctx, *data, rest[0], *asJSON, stdout, stderr); err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch replay:", err)
		return 1
	}
	return 0
}

// replay steps a run again and prints what comes of it.
func replay(ctx context.Context, dir, id string, asJSON bool, stdout, stderr io.Writer) (err error) {
	runs, err := openRuns(ctx, dir)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, runs.Catalog.Close()) }()
	f, err := runs.Open(ctx, id)
	if err != nil {
		return fmt.Errorf("%w: `throatwatch runs --data %s` lists the runs", err, dir)
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	header, err := f.Header(ctx)
	if err != nil {
		return err
	}
	out := bufio.NewWriterSize(stdout, 64<<10)
	began := time.Now()
	res, err := restep(ctx, f, &header, func(o *pipeline.Outcome, cfg *pipeline.Config) error {
		if !asJSON {
			return nil
		}
		if body, _, ok := dashboard.EncodeFrame(o, cfg); ok {
			_, err := out.Write(append(body, '\n'))
			return err
		}
		return nil
	}, nil)
	if err := errors.Join(err, out.Flush()); err != nil {
		return err
	}
	took := time.Since(began)
	length := time.Duration(float64(res.scans) * float64(res.period))
	_, _ = fmt.Fprintf(stderr, "run %s: %d operating points, %d alarm transitions, %v replayed in %v (%.0f × real time)\nsha256 %s\n",
		id, res.scans, res.alarms, length.Round(time.Second), took.Round(time.Millisecond), float64(length)/float64(took), res.digest)
	return compareDigest(&header, res.digest, stderr)
}

// restepped is what stepping a run again gave.
type restepped struct {
	scans, alarms int // of the run itself, without what lies before it
	digest        string
	period        int64 // ns between scans
}

// restep steps the records of a run again. Point, if it is set, is called with each
// operating point of the run, and each with every record.
func restep(ctx context.Context, f *runfile.File, header *runfile.Header, point func(*pipeline.Outcome, *pipeline.Config) error, each func(*ingest.Record)) (res restepped, err error) {
	m := pipeline.NewMachine(watch.Parse)
	p, err := pipeline.OpenReplay(ctx, f, m, 0)
	if err != nil {
		return res, err
	}
	inRun := false
	err = p.Run(ctx, 0, func(r *ingest.Record, outs []pipeline.Outcome) error {
		cfg, _ := m.Config()
		if each != nil {
			each(r)
		}
		if r.Kind == ingest.KindGap { // the run may have begun or ended among the records that are missing
			inRun = p.State.RunActive && p.State.Run.ID == header.Stepped()
		}
		for i := range outs {
			o := &outs[i]
			switch {
			case o.Kind == pipeline.OutcomeRun:
				if inRun = o.Event == "started" && o.Run.ID == header.Stepped(); o.Run.ID == header.Stepped() {
					res.digest = p.Digest.String() // what comes after the end of the run is not of it
				}
			case !inRun:
			case o.Kind == pipeline.OutcomeAlarm:
				res.alarms++
			case o.Kind == pipeline.OutcomePoint:
				res.scans++
				if point == nil {
					continue
				}
				if err := point(o, &cfg); err != nil {
					return err
				}
			}
		}
		return nil
	})
	if inRun || res.digest == "" { // its end is not stored
		res.digest = p.Digest.String()
	}
	res.period = period(m)
	return res, err
}

func period(m *pipeline.Machine) int64 {
	cfg, _ := m.Config()
	return cfg.Align.Period
}

// compareDigest says whether the replay gave what was recorded live.
func compareDigest(h *runfile.Header, got string, stderr io.Writer) error {
	switch {
	case h.Digest == "":
		_, _ = fmt.Fprintln(stderr, "the run has no digest to compare with: it has not ended")
	case h.Digest == got:
		_, _ = fmt.Fprintln(stderr, "the same as recorded live")
	case h.Build != watch.Build():
		_, _ = fmt.Fprintf(stderr, "not bit for bit as recorded live, by build %s; this is build %s\n", h.Build, watch.Build())
	default:
		return fmt.Errorf("the run was recorded live by this build with sha256 %s: the file was changed, or the computation is not deterministic", h.Digest)
	}
	return nil
}
