package runfile_test

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"throatwatch/ingest/runfile"
)

// runs makes a folder of closed run files of invented rigs.
func runs(t *testing.T) (dir string) {
	t.Helper()
	dir = filepath.Join(t.TempDir(), "runs [1]") // a name that is a pattern, too
	if err := os.Mkdir(dir, 0o700); err != nil {
		t.Fatal(err)
	}
	for i, h := range []runfile.Header{
		{ID: "a", Rig: "cell-1", Engine: "Falkor J1", EngineSerial: "7", State: runfile.StateEnded, Tags: []string{"endurance", "night"}, Alarms: 3},
		{ID: "b", Rig: "cell-1", Engine: "Falkor J1", EngineSerial: "8", State: runfile.StateEnded, Notes: "Blade out \"soon\"", Keep: true},
		{ID: "c", Rig: "cell-2", Engine: "Mistral", State: runfile.StateRunning, Tags: []string{"night"}},
	} {
		h.Started = int64(i+1) * second
		f, err := runfile.Create(t.Context(), filepath.Join(dir, h.ID+".db"), h, runfile.Options{})
		if err != nil {
			t.Fatal(err)
		}
		commit(t, f, runfile.Batch{Records: messages(1, 10, 10)})
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

func ids(list []runfile.Run) string {
	var s []string
	for _, r := range list {
		s = append(s, r.ID)
	}
	return strings.Join(s, " ")
}

func catalogue(t *testing.T, path, dir string) *runfile.Catalog {
	t.Helper()
	c, err := runfile.OpenCatalog(t.Context(), path, dir)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { c.Close() })
	return c
}

func TestCatalogList(t *testing.T) {
	dir := runs(t)
	c := catalogue(t, filepath.Join(t.TempDir(), "catalog.db"), dir)
	for _, tc := range []struct {
		name   string
		filter runfile.Filter
		want   string
	}{
		{"all, newest first", runfile.Filter{}, "c b a"},
		{"rig", runfile.Filter{Rig: "cell-1"}, "b a"},
		{"engine and serial", runfile.Filter{Engine: "Falkor J1", EngineSerial: "7"}, "a"},
		{"state", runfile.Filter{State: runfile.StateRunning}, "c"},
		{"tag", runfile.Filter{Tag: "night"}, "c a"},
		{"no part of a tag", runfile.Filter{Tag: "nig"}, ""},
		{"text in notes, case aside", runfile.Filter{Text: "blade OUT"}, "b"},
		{"from is inclusive", runfile.Filter{From: 2 * second}, "c b"},
		{"to is exclusive", runfile.Filter{To: 2 * second}, "a"},
		{"limit", runfile.Filter{Limit: 2}, "c b"},
	} {
		got, err := c.List(t.Context(), tc.filter)
		if err != nil || ids(got) != tc.want {
			t.Errorf("%s: %q, %v, want %q", tc.name, ids(got), err, tc.want)
		}
	}
	r, err := c.Get(t.Context(), "a")
	info, statErr := os.Stat(c.Path(r))
	if err != nil || statErr != nil || r.Alarms != 3 || r.Size != info.Size() || !slices.Equal(r.Tags, []string{"endurance", "night"}) {
		t.Errorf("get %+v, %v, %v", r, err, statErr)
	}
	r.Notes = "changed"
	if err := c.Upsert(t.Context(), r); err != nil {
		t.Fatal(err)
	}
	if r, err = c.Get(t.Context(), "a"); err != nil || r.Notes != "changed" {
		t.Errorf("after upsert %+v, %v", r, err)
	}
	r.File = "../elsewhere.db"
	if err := c.Upsert(t.Context(), r); err == nil {
		t.Error("a file outside the folder was taken")
	}
}

func TestCatalogRebuild(t *testing.T) {
	dir := runs(t)
	path := filepath.Join(t.TempDir(), "catalog.db")
	if err := os.WriteFile(path, []byte(strings.Repeat("no database ", 1000)), 0o600); err != nil {
		t.Fatal(err)
	}
	for name, content := range map[string]string{"x.db": "", "y.db": strings.Repeat("rubbish ", 9000), "half.db.new": "", "notes.txt": ""} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(content), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	copied, err := os.ReadFile(filepath.Join(dir, "a.db"))
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "copy of a.db"), copied, 0o600); err != nil {
		t.Fatal(err)
	}
	c := catalogue(t, path, dir) // damaged: made anew
	if list, err := c.List(t.Context(), runfile.Filter{}); err != nil || ids(list) != "c b a" {
		t.Errorf("list %q, %v", ids(list), err)
	}
	if err := runfile.Remove(filepath.Join(dir, "b.db")); err != nil {
		t.Fatal(err)
	}
	faults, err := c.Rebuild(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if list, err := c.List(t.Context(), runfile.Filter{}); err != nil || ids(list) != "c a" {
		t.Errorf("list %q, %v", ids(list), err)
	}
	var not, bad, twice int
	for _, err := range faults {
		switch {
		case errors.Is(err, runfile.ErrNotRunFile):
			not++
		case errors.Is(err, runfile.ErrCorrupt):
			bad++
		case strings.Contains(err.Error(), `id "a" is that of`):
			twice++
		}
	}
	if fmt.Sprint(len(faults), not, bad, twice) != "3 1 1 1" {
		t.Errorf("faults %v", faults)
	}
}

func TestCatalogDelete(t *testing.T) {
	dir := runs(t)
	c := catalogue(t, filepath.Join(t.TempDir(), "catalog.db"), dir)
	if err := c.Delete(t.Context(), "b"); !errors.Is(err, runfile.ErrKept) {
		t.Errorf("kept run: %v", err)
	}
	// The mark counts even where the catalogue has not heard of it.
	f := open(t, filepath.Join(dir, "c.db"), runfile.ReadWrite)
	if err := f.UpdateHeader(t.Context(), func(h *runfile.Header) { h.Keep = true }); err != nil {
		t.Fatal(err)
	}
	if err := c.Delete(t.Context(), "c"); !errors.Is(err, runfile.ErrKept) {
		t.Errorf("run just marked: %v", err)
	}
	if err := os.WriteFile(filepath.Join(dir, "a.db-wal"), nil, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := c.Delete(t.Context(), "a"); err != nil {
		t.Error(err)
	}
	if left, _ := filepath.Glob(filepath.Join(strings.ReplaceAll(dir, "[", `\[`), "a.db*")); len(left) != 0 {
		t.Errorf("left %q", left)
	}
	if err := c.Delete(t.Context(), "a"); !errors.Is(err, runfile.ErrUnknownRun) {
		t.Errorf("deleted twice: %v", err)
	}
	if list, err := c.List(t.Context(), runfile.Filter{}); err != nil || ids(list) != "c b" {
		t.Errorf("list %q, %v", ids(list), err)
	}
}

// Retention takes the oldest runs that have ended, and no kept or running one.
func TestCatalogExpired(t *testing.T) {
	dir := t.TempDir()
	c := catalogue(t, filepath.Join(t.TempDir(), "catalog.db"), dir)
	for _, r := range []struct {
		id    string
		ended int64
		state string
		keep  bool
	}{
		{"first", 10, runfile.StateEnded, false},
		{"kept", 20, runfile.StateEnded, true},
		{"second", 30, runfile.StateEnded, false},
		{"third", 40, runfile.StateEnded, false},
		{"on", 0, runfile.StateRunning, false},
	} {
		h := runfile.Header{ID: r.id, Started: 1, Ended: r.ended * second, State: r.state, Keep: r.keep}
		if err := c.Upsert(t.Context(), runfile.Run{Header: h, File: r.id + ".db", Size: 100}); err != nil {
			t.Fatal(err)
		}
	}
	for _, tc := range []struct {
		name string
		r    runfile.Retention
		want string
	}{
		{"nothing is asked", runfile.Retention{}, ""},
		{"age, its bound is kept", runfile.Retention{Age: 70 * second}, "first"},
		{"older", runfile.Retention{Age: 60 * second}, "first second"},
		{"all fit", runfile.Retention{Bytes: 500}, ""},
		{"one byte too many", runfile.Retention{Bytes: 499}, "first"},
		{"kept and running runs count", runfile.Retention{Bytes: 300}, "first second"},
		{"no more can go", runfile.Retention{Bytes: 1}, "first second third"},
		{"age leaves room for bytes", runfile.Retention{Age: 70 * second, Bytes: 400}, "first"},
	} {
		got, err := c.Expired(t.Context(), tc.r, 100*second)
		if err != nil || ids(got) != tc.want {
			t.Errorf("%s: %q, %v, want %q", tc.name, ids(got), err, tc.want)
		}
	}
}

// A note reaches file and catalogue, and leaves the rest of the header.
func TestCatalogAnnotate(t *testing.T) {
	dir := runs(t)
	c := catalogue(t, filepath.Join(t.TempDir(), "catalog.db"), dir)
	run, err := c.Annotate(t.Context(), "a", func(h *runfile.Header) { h.Keep, h.Notes = true, "blade scan due" })
	if err != nil || !run.Keep || run.EngineSerial != "7" {
		t.Errorf("%+v, %v", run, err)
	}
	stored, err := runfile.ReadRun(t.Context(), filepath.Join(dir, "a.db"))
	listed, errList := c.Get(t.Context(), "a")
	if err := errors.Join(err, errList); err != nil || !stored.Keep || stored.Notes != "blade scan due" || listed.Notes != stored.Notes {
		t.Errorf("stored %+v, listed %+v, %v", stored, listed, err)
	}
	if _, err := c.Annotate(t.Context(), "nothing", func(*runfile.Header) {}); !errors.Is(err, runfile.ErrUnknownRun) {
		t.Errorf("unknown run: %v", err)
	}
}

func TestCatalogRefusesForeign(t *testing.T) {
	dir := runs(t)
	// A run file is a database, but no catalogue.
	if c, err := runfile.OpenCatalog(t.Context(), filepath.Join(dir, "a.db"), dir); !errors.Is(err, runfile.ErrNotRunFile) {
		if err == nil {
			c.Close()
		}
		t.Errorf("run file taken for a catalogue: %v", err)
	}
	f := open(t, filepath.Join(dir, "a.db"), runfile.ReadOnly)
	wantRecords(t, f, 0, 0, messages(1, 10, 10))
}

// Reductions stand behind the run that they were made from, in the order of their making.
func TestFamilies(t *testing.T) {
	run := func(id, parent string) runfile.Run {
		r := runfile.Run{Header: runfile.Header{ID: id}}
		if parent != "" {
			r.Origin = &runfile.Origin{Kind: runfile.OriginReduction, Parent: parent}
		}
		return r
	}
	imported := run("c", "")
	imported.Origin = &runfile.Origin{Kind: runfile.OriginImport}
	var got []string
	for _, r := range runfile.Families([]runfile.Run{run("b-r10", "b"), run("b-r2", "b"), imported, run("b", ""), run("b-r2-r1", "b-r2"), run("lost-r1", "lost"), run("a", ""), run("self", "self")}) {
		got = append(got, r.ID)
	}
	if want := []string{"c", "b", "b-r2", "b-r2-r1", "b-r10", "lost-r1", "a", "self"}; !slices.Equal(got, want) {
		t.Errorf("%v, want %v", got, want)
	}
}
