package runfile_test

import (
	"bytes"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"unsafe"

	"modernc.org/libc"
	sqlite3 "modernc.org/sqlite/lib"

	"throatwatch/ingest/runfile"
)

// sector is what a disk writes whole or not at all, bytes.
const sector = 512

// written is one call of SQLite that changes a file, or makes its changes durable.
type written struct {
	path string
	what change
	at   int64 // of a write where, of a cut the size
	data []byte
}

type change int

const (
	writing change = iota
	cutting
	syncing
	removing
)

// layer is a file layer beneath SQLite that passes everything on and records what is
// written to the files of one folder, and when they are synced.
type layer struct {
	folder string
	ours   uintptr // the layer as SQLite knows it, and what it passes on to
	system uintptr
	keep   []any               // functions that C structures point to
	tables map[uintptr]uintptr // of methods: the system's → ours

	mu    sync.Mutex // protects the fields below
	files map[uintptr]string
	log   []written
}

// inC gives what stands at an address that is none of Go's.
func inC[T any](p uintptr) *T { return *(**T)(unsafe.Pointer(&p)) }

// call makes the function that a C structure points to.
func call[F any](p uintptr) F { return *(*F)(unsafe.Pointer(&p)) }

// point gives what a C structure points to for a function.
func (l *layer) point(f any) uintptr {
	l.keep = append(l.keep, f)
	return (*(*[2]uintptr)(unsafe.Pointer(&f)))[1]
}

type (
	opens     = func(*libc.TLS, uintptr, uintptr, uintptr, int32, uintptr) int32
	writes    = func(*libc.TLS, uintptr, uintptr, int32, int64) int32
	removes   = func(*libc.TLS, uintptr, uintptr, int32) int32
	truncates = func(*libc.TLS, uintptr, int64) int32
	syncs     = func(*libc.TLS, uintptr, int32) int32
)

// newLayer puts a layer under all files that are opened until the test ends.
func newLayer(t *testing.T, folder string) *layer {
	t.Helper()
	tls := libc.NewTLS()
	l := &layer{folder: folder, tables: map[uintptr]uintptr{}, files: map[uintptr]string{}}
	l.system = sqlite3.Xsqlite3_vfs_find(tls, 0)
	l.ours = libc.Xmalloc(tls, libc.Tsize_t(unsafe.Sizeof(sqlite3.Tsqlite3_vfs{})))
	name, err := libc.CString("recording")
	if err != nil {
		t.Fatal(err)
	}
	vfs := inC[sqlite3.Tsqlite3_vfs](l.ours)
	*vfs = *inC[sqlite3.Tsqlite3_vfs](l.system)
	vfs.FpNext, vfs.FzName = 0, name
	open := call[opens](vfs.FxOpen)
	vfs.FxOpen = l.point(func(tls *libc.TLS, _, path, file uintptr, flags int32, out uintptr) int32 {
		rc := open(tls, l.system, path, file, flags, out)
		if rc == sqlite3.SQLITE_OK && path != 0 {
			l.opened(tls, libc.GoString(path), file)
		}
		return rc
	})
	unlink := call[removes](vfs.FxDelete)
	vfs.FxDelete = l.point(func(tls *libc.TLS, _, path uintptr, folder int32) int32 {
		rc := unlink(tls, l.system, path, folder)
		if name := libc.GoString(path); rc == sqlite3.SQLITE_OK && strings.HasPrefix(name, l.folder) {
			l.note(written{path: name, what: removing})
		}
		return rc
	})
	if rc := sqlite3.Xsqlite3_vfs_register(tls, l.ours, 1); rc != sqlite3.SQLITE_OK {
		t.Fatalf("the layer is not taken: %d", rc)
	}
	t.Cleanup(func() {
		if rc := sqlite3.Xsqlite3_vfs_register(tls, l.system, 1); rc != sqlite3.SQLITE_OK {
			t.Errorf("the system's file layer is not taken again: %d", rc)
		}
		sqlite3.Xsqlite3_vfs_unregister(tls, l.ours)
		tls.Close()
	})
	return l
}

// opened puts recording methods in the place of a file's own.
func (l *layer) opened(tls *libc.TLS, path string, file uintptr) {
	if !strings.HasPrefix(path, l.folder) {
		return
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	l.files[file] = strings.TrimSuffix(path, ".new") // a file is made under another name, and renamed
	f := inC[sqlite3.Tsqlite3_file](file)
	ours, ok := l.tables[f.FpMethods]
	if !ok {
		ours = libc.Xmalloc(tls, libc.Tsize_t(unsafe.Sizeof(sqlite3.Tsqlite3_io_methods{})))
		m := inC[sqlite3.Tsqlite3_io_methods](ours)
		*m = *inC[sqlite3.Tsqlite3_io_methods](f.FpMethods)
		write, truncate, sync := call[writes](m.FxWrite), call[truncates](m.FxTruncate), call[syncs](m.FxSync)
		m.FxWrite = l.point(func(tls *libc.TLS, file, buf uintptr, n int32, at int64) int32 {
			l.noteFile(file, written{what: writing, at: at, data: bytes.Clone(libc.GoBytes(buf, int(n)))})
			return write(tls, file, buf, n, at)
		})
		m.FxTruncate = l.point(func(tls *libc.TLS, file uintptr, size int64) int32 {
			l.noteFile(file, written{what: cutting, at: size})
			return truncate(tls, file, size)
		})
		m.FxSync = l.point(func(tls *libc.TLS, file uintptr, flags int32) int32 {
			rc := sync(tls, file, flags)
			l.noteFile(file, written{what: syncing})
			return rc
		})
		l.tables[f.FpMethods] = ours
	}
	f.FpMethods = ours
}

func (l *layer) noteFile(file uintptr, w written) {
	l.mu.Lock()
	w.path = l.files[file]
	l.mu.Unlock()
	l.note(w)
}

func (l *layer) note(w written) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.log = append(l.log, w)
}

func (l *layer) length() int {
	l.mu.Lock()
	defer l.mu.Unlock()
	return len(l.log)
}

// fate is what becomes of a write after the last sync of its file.
type fate int

const (
	kept fate = iota
	dropped
	torn // some of its sectors are written
	fates
)

// after gives the files as a power cut after so many calls leaves them: all that was
// synced is there; of what came later, the fate of each change is asked for. A file is
// gone for good once the folder was synced, which SQLite does with the first sync of
// each new log or journal.
func (l *layer) after(calls int, ask func() fate, random *rand.Rand) map[string][]byte {
	synced, folder := map[string]int{}, -1
	fresh := map[string]bool{}
	for i, w := range l.log[:calls] {
		switch w.what {
		case removing:
			fresh[w.path] = true
		case syncing:
			synced[w.path] = i
			if known, ok := fresh[w.path]; (known || !ok) && !strings.HasSuffix(w.path, ".db") {
				folder = i
			}
			fresh[w.path] = false
		case writing, cutting:
		}
	}
	files, doomed := map[string][]byte{}, map[string]bool{}
	for i, w := range l.log[:calls] {
		f, fate := files[w.path], kept
		until, ok := synced[w.path]
		if w.what == removing {
			until, ok = folder, true
		}
		if w.what != syncing && (!ok || i > until) {
			fate = ask()
		}
		if doomed[w.path] && w.what != removing { // it was made again
			f, doomed[w.path] = nil, false
		}
		switch {
		case w.what == removing && fate != kept:
			doomed[w.path] = true
			continue
		case w.what == removing:
			delete(files, w.path)
			continue
		case w.what == syncing || fate == dropped:
		case w.what == cutting:
			f = f[:min(int64(len(f)), w.at)]
		case w.what == writing:
			if end := w.at + int64(len(w.data)); end > int64(len(f)) {
				f = append(f, make([]byte, end-int64(len(f)))...)
			}
			for from := 0; from < len(w.data); from += sector {
				if fate == kept || random.IntN(2) == 0 {
					copy(f[w.at+int64(from):], w.data[from:min(from+sector, len(w.data))])
				}
			}
		}
		files[w.path] = f
	}
	return files
}

// TestPowerCut drops, tears and reorders what was written after the last sync, at any
// call of SQLite that changes a file: while records are committed, while the log is
// folded into the file and begun again, and while it is closed. What is found then is
// whole and reaches at least to the last commit that had returned. It is not parallel:
// the layer is beneath all files of the process.
func TestPowerCut(t *testing.T) {
	cuts := 200
	if testing.Short() {
		cuts = 30
	}
	folder := t.TempDir()
	l := newLayer(t, folder)
	path := filepath.Join(folder, "run.db")
	f, err := runfile.Create(t.Context(), path, rig0, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	type point struct {
		calls int
		seq   uint64
	}
	points := []point{{l.length(), 0}}
	seq := uint64(0)
	for round := range uint64(60) {
		b := nextBatch(seq, round)
		commit(t, f, b)
		seq = b.Records[len(b.Records)-1].Seq
		points = append(points, point{l.length(), seq})
		if round%13 == 12 {
			if err := f.Fold(t.Context()); err != nil {
				t.Fatal(err)
			}
		}
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	random := rand.New(rand.NewPCG(8, 1))
	whole := l.after(l.length(), func() fate { return kept }, random)[path]
	if stored, err := os.ReadFile(path); err != nil || string(stored) != string(whole) {
		t.Fatalf("the layer has recorded %d bytes, the file has %d (%v)", len(whole), len(stored), err)
	}
	asks := []func() fate{
		func() fate { return dropped },
		func() fate { return torn },
		func() fate { return fate(random.IntN(int(fates))) },
	}
	later := 0
	for n := range cuts {
		calls := points[0].calls + random.IntN(l.length()-points[0].calls+1)
		var acked uint64
		for _, p := range points {
			if p.calls <= calls {
				acked = p.seq
			}
		}
		dir := t.TempDir()
		for name, content := range l.after(calls, asks[n%len(asks)], random) {
			if err := os.WriteFile(filepath.Join(dir, filepath.Base(name)), content, 0o600); err != nil {
				t.Fatal(err)
			}
		}
		g, err := runfile.Open(t.Context(), filepath.Join(dir, "run.db"), runfile.Mode(random.IntN(2)), runfile.Options{})
		if err != nil {
			t.Fatalf("cut after call %d of %d: %v", calls, l.length(), err)
		}
		wantWhole(t, g, acked)
		if end, _ := g.Durable(); end > acked {
			later++
		}
		if err := g.Close(); err != nil {
			t.Fatal(err)
		}
	}
	t.Logf("%d cuts within %d calls that change a file; %d files held a commit that had not returned", cuts, l.length(), later)
}
