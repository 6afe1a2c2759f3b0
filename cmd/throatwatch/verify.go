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

	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/archive"
)

// How the digest of a run that was stepped again compares.
const (
	digestSame       = "same"        // as recorded live
	digestDiffers    = "differs"     // a fault
	digestOtherBuild = "other_build" // not bit for bit, which another build need not give
	digestNone       = "none"        // the file has none: no run, or one that has not ended
	digestNotStepped = "not_stepped" // the records are damaged
)

// verified is what was found of a file, as --json prints it.
type verified struct {
	File  string `json:"file"`
	Run   string `json:"run"` // "" when the header cannot be read
	State string `json:"state"`
	runfile.Counts
	Digest string   `json:"digest"`
	Faults []string `json:"faults"`
}

func (v *verified) fault(err error) {
	v.Faults = append(v.Faults, strings.ReplaceAll(err.Error(), "\n", "; "))
}

// verifyCommand reads stored runs to the last byte and steps them again. It gives 0
// when there is no fault, 1 when there is one, 2 when called wrongly.
func verifyCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("verify RUN … | --all", "Read stored runs to the last byte: structure, checksum of every row, numbers of the records without a hole.\n"+
		"Then step the records again and compare the digest with the one recorded live.", stderr)
	data := flags.String("data", "data", "data folder")
	all := flags.Bool("all", false, "every run and idle file of the data folder, and the list of runs")
	asJSON := flags.Bool("json", false, "an object per file and line; progress as JSON too")
	rest, code := parseArgs(flags, args, stderr)
	if code >= 0 {
		return code
	}
	if *all == (len(rest) > 0) {
		_, _ = fmt.Fprintln(stderr, "throatwatch verify: give runs, or --all; `throatwatch runs` lists them")
		return 2
	}
	paths, err := storedFiles(*data, rest)
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch verify:", err)
		return 1
	}
	faults := 0
	tell := func(v *verified) {
		faults += len(v.Faults)
		if *asJSON {
			b, err := json.Marshal(v)
			if err != nil {
				panic("verify: " + err.Error()) // strings and numbers encode
			}
			_, _ = fmt.Fprintf(stdout, "%s\n", b)
			return
		}
		printVerified(stdout, v)
	}
	for _, path := range paths {
		progress := newProgress(stderr, *asJSON)
		v := verifyFile(ctx, path, progress)
		progress.end()
		if ctx.Err() != nil {
			_, _ = fmt.Fprintln(stderr, "throatwatch verify: called off before the end")
			return 1
		}
		tell(v)
	}
	if *all {
		tell(verifyCatalog(ctx, *data))
	}
	if faults > 0 {
		_, _ = fmt.Fprintf(stderr, "throatwatch verify: %d faults in %s: keep these files as they are, and look for a copy of them\n", faults, *data)
		return 1
	}
	return 0
}

// storedFiles gives the paths of runs, or of everything that is recorded.
func storedFiles(dir string, ids []string) (paths []string, err error) {
	if info, err := os.Stat(filepath.Join(dir, "runs")); err != nil || !info.IsDir() {
		return nil, fmt.Errorf("%s holds no runs: give the folder of a watch by --data", dir)
	}
	for _, id := range ids {
		path := filepath.Join(dir, "runs", id+".db")
		if _, err := os.Stat(path); err != nil || id != filepath.Base(id) {
			return nil, fmt.Errorf("run %q: there is no such file: `throatwatch runs --data %s` lists the runs", id, dir)
		}
		paths = append(paths, path)
	}
	if len(ids) > 0 {
		return paths, nil
	}
	for folder, begin := range map[string]string{filepath.Join(dir, "runs"): "", dir: "idle-"} {
		entries, err := os.ReadDir(folder)
		if err != nil {
			return nil, fmt.Errorf("data folder: %w", err)
		}
		for _, e := range entries {
			if strings.HasPrefix(e.Name(), begin) && strings.HasSuffix(e.Name(), ".db") {
				paths = append(paths, filepath.Join(folder, e.Name()))
			}
		}
	}
	slices.Sort(paths)
	return paths, nil
}

// verifyFile reads a file and steps it again.
func verifyFile(ctx context.Context, path string, progress *progress) *verified {
	v := &verified{File: path, Digest: digestNotStepped, Faults: []string{}}
	f, err := runfile.Open(ctx, path, runfile.ReadOnly, runfile.Options{})
	if err != nil {
		v.fault(err)
		return v
	}
	defer f.Close() //nolint:errcheck // it is only read
	header, err := f.Header(ctx)
	if err == nil { // else Check says so
		v.Run, v.State = header.ID, header.State
	}
	codec := archive.NewCodec()
	var rows archive.Chunk
	chunk := 0
	sound := true // what a replay needs
	v.Counts, err = f.Check(ctx, func(err error) {
		v.fault(err)
		sound = false
	}, func(c *runfile.Chunk) error {
		chunk++
		if err := codec.Decode(&rows, c.Bytes, nil); err != nil {
			v.fault(fmt.Errorf("run file %q: chunk %d (%s, of record %d): %w", path, chunk, c.Kind, c.Seq, err))
		}
		return nil
	})
	if err != nil {
		v.fault(err)
		return v
	}
	if !sound {
		return v
	}
	stepped := uint64(0)
	res, err := restep(ctx, f, &header, nil, func(*ingest.Record) {
		stepped++
		progress.show(float64(stepped)/float64(max(v.Records, 1)), int64(stepped), "records")
	})
	switch {
	case err != nil:
		v.fault(fmt.Errorf("stepped again: %w", err))
	case header.Digest == "":
		v.Digest = digestNone
	case header.Digest == res.digest:
		v.Digest = digestSame
	case header.Build != watch.Build():
		v.Digest = digestOtherBuild
	default:
		v.Digest = digestDiffers
		v.fault(fmt.Errorf("run file %q: stepped again by the same build its digest is %s, recorded live was %s: the file was changed, or the computation is not deterministic", path, res.digest, header.Digest))
	}
	return v
}

// verifyCatalog looks for runs whose file is gone, and for lines that differ from
// the file.
func verifyCatalog(ctx context.Context, dir string) (v *verified) {
	v = &verified{File: filepath.Join(dir, "catalog.db"), Digest: digestNone, Faults: []string{}}
	runs, err := openRuns(ctx, dir)
	if err != nil {
		v.fault(err)
		return v
	}
	list, err := runs.Catalog.List(ctx, runfile.Filter{})
	if err = errors.Join(err, runs.Catalog.Close()); err != nil {
		v.fault(err)
		return v
	}
	for i := range list {
		path := runs.Catalog.Path(list[i])
		if _, err := os.Stat(path); err != nil {
			v.fault(fmt.Errorf("list of runs: the file of run %s is gone: %w", list[i].ID, err))
			continue
		}
		now, err := runfile.ReadRun(ctx, path)
		if err == nil && list[i].State == runfile.StateEnded && (now.ID != list[i].ID || now.Digest != list[i].Digest) {
			v.fault(fmt.Errorf("list of runs: run %s with digest %s is run %s with digest %s in %s", list[i].ID, list[i].Digest, now.ID, now.Digest, path))
		}
	}
	return v
}

func printVerified(w io.Writer, v *verified) {
	if v.Run == "" && v.Records == 0 && len(v.Faults) == 0 {
		_, _ = fmt.Fprintf(w, "%s: no fault found\n", v.File)
		return
	}
	said := "no fault found"
	if n := len(v.Faults); n == 1 {
		said = "1 fault"
	} else if n > 1 {
		said = fmt.Sprintf("%d faults", n)
	}
	_, _ = fmt.Fprintf(w, "%s: %d records, %d checkpoints, %d chunks, %d events read: %s; %s\n",
		v.File, v.Records, v.Checkpoints, v.Chunks, v.Events, said, digestText(v.Digest))
	for _, f := range v.Faults {
		_, _ = fmt.Fprintf(w, "  %s\n", f)
	}
}

func digestText(digest string) string {
	switch digest {
	case digestSame:
		return "stepped again, the digest is that recorded live"
	case digestDiffers:
		return "stepped again, the digest is another"
	case digestOtherBuild:
		return "stepped again by another build than the one that recorded it, the digest is another, as it may be"
	case digestNone:
		return "stepped again; there is no digest to compare with"
	}
	return "not stepped again"
}

// copyCommand copies a stored run, also one that is being recorded. It gives 0 when
// the copy is there, 1 when not, 2 when called wrongly.
func copyCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("copy RUN --to FILE", "Copy a stored run to a file, also one that is being recorded: the copy has everything\n"+
		"up to the last durable record, and the recording is not held up.", stderr)
	data := flags.String("data", "data", "data folder")
	to := flags.String("to", "", "file to write, as RUN.db; it must not be there")
	rest, code := parseArgs(flags, args, stderr)
	if code >= 0 {
		return code
	}
	if len(rest) != 1 || *to == "" {
		_, _ = fmt.Fprintln(stderr, "throatwatch copy: give one run and --to FILE; `throatwatch runs` lists the runs")
		return 2
	}
	if err := copyRun(ctx, *data, rest[0], *to, stdout); err != nil {
		if errors.Is(err, os.ErrExist) {
			err = fmt.Errorf("%w: give another --to", err)
		}
		_, _ = fmt.Fprintln(stderr, "throatwatch copy:", err)
		return 1
	}
	return 0
}

func copyRun(ctx context.Context, dir, id, to string, stdout io.Writer) (err error) {
	f, done, err := openRun(ctx, dir, id)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, done()) }()
	seq, host, err := runfile.Snapshot(ctx, f, to)
	if err != nil {
		return err
	}
	info, err := os.Stat(to)
	if err != nil {
		return err
	}
	_, _ = fmt.Fprintf(stdout, "%s: run %s up to record %d, received at %s, %.1f MB\n", to, id, seq, *utc(host), float64(info.Size())/1e6)
	return nil
}
