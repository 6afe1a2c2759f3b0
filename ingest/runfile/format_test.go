package runfile_test

import (
	"bytes"
	"compress/gzip"
	"encoding/binary"
	"errors"
	"io"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"throatwatch/ingest/runfile"
)

// formatFile is a run file of format 1 as a build of its time left it: records 1 to
// 40 packed under a checkpoint with a chunk and an event, 41 to 50 as committed.
const formatFile = "testdata/format1.db.gz"

// formatContent is what it holds, in commits.
func formatContent() []runfile.Batch {
	return []runfile.Batch{
		{Records: messages(1, 30, 50)},
		{
			Records:    messages(31, 40, 5),
			Chunks:     []runfile.Chunk{{Kind: "points", FirstT: 10, LastT: 19, Rows: 2, Bytes: []byte("columns")}},
			Events:     []runfile.Event{{Epoch: 1, N: 1, T: 12, Kind: "alarm", JSON: []byte(`{"a":1}`)}},
			Checkpoint: &runfile.Checkpoint{Seq: 40, Host: hostOf(40), State: bytes.Repeat([]byte("state "), 100), Digest: []byte{1, 2}, Full: true},
		},
		{Records: messages(41, 50, 80), Meta: map[string][]byte{"cursor": []byte("1.1")}},
	}
}

// unpacked writes the file with its bytes changed by edit.
func unpacked(t *testing.T, edit func([]byte)) string {
	t.Helper()
	packed, err := os.Open(formatFile)
	if err != nil {
		t.Fatal(err)
	}
	defer packed.Close()
	r, err := gzip.NewReader(packed)
	if err != nil {
		t.Fatal(err)
	}
	b, err := io.ReadAll(r)
	if err != nil {
		t.Fatal(err)
	}
	edit(b)
	path := filepath.Join(t.TempDir(), "run.db")
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// TestFormat1: whatever a build writes itself, it reads what was stored before it and
// goes on in it.
func TestFormat1(t *testing.T) {
	ctx := t.Context()
	path := unpacked(t, func([]byte) {})
	content := formatContent()
	want := slices.Concat(content[0].Records, content[1].Records, content[2].Records)
	for _, mode := range []runfile.Mode{runfile.ReadOnly, runfile.ReadWrite} {
		f := open(t, path, mode)
		wantRecords(t, f, 0, 0, want)
		c, err := f.LastCheckpoint(ctx, 1<<62)
		if w := content[1].Checkpoint; err != nil || c.Seq != w.Seq || c.Host != w.Host || !bytes.Equal(c.State, w.State) || !bytes.Equal(c.Digest, w.Digest) || !c.Full {
			t.Errorf("checkpoint %+v, %v", c, err)
		}
		n := 0
		err = errors.Join(
			f.Chunks(ctx, "points", 0, 100, func(c *runfile.Chunk) error {
				if n++; c.Seq != 40 || c.Rows != 2 || string(c.Bytes) != "columns" {
					t.Errorf("chunk %+v", c)
				}
				return nil
			}),
			f.Events(ctx, 0, 100, func(e *runfile.Event) error {
				if n++; e.Epoch != 1 || e.N != 1 || e.Seq != 40 || e.Kind != "alarm" || string(e.JSON) != `{"a":1}` {
					t.Errorf("event %+v", e)
				}
				return nil
			}))
		if err != nil || n != 2 {
			t.Errorf("%d chunks and events, %v", n, err)
		}
		if h, err := f.Header(ctx); err != nil || h.ID != rig0.ID || h.Started != rig0.Started || h.State != runfile.StateRunning {
			t.Errorf("header %+v, %v", h, err)
		}
		if v, err := f.Meta(ctx, "cursor"); err != nil || string(v) != "1.1" {
			t.Errorf("cursor %q, %v", v, err)
		}
		verify(t, f)
		if mode == runfile.ReadWrite {
			commit(t, f, runfile.Batch{Records: messages(51, 60, 20)})
			wantRecords(t, f, 0, 0, append(want, messages(51, 60, 20)...))
		}
	}
}

// TestLaterFormat: a file of a later format is refused by name and stays as it is, as
// one of another program does. The places are those of the SQLite file format, 1.3.
func TestLaterFormat(t *testing.T) {
	for _, tt := range []struct {
		name string
		at   int // big-endian u32: 60 user version, 68 application id
		is   uint32
		want error
	}{
		{"later format", 60, 2, runfile.ErrVersion},
		{"no format", 60, 0, runfile.ErrVersion},
		{"another program", 68, 7, runfile.ErrNotRunFile},
	} {
		path := unpacked(t, func(b []byte) { binary.BigEndian.PutUint32(b[tt.at:], tt.is) })
		before, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		for _, mode := range []runfile.Mode{runfile.ReadOnly, runfile.ReadWrite} {
			if _, err := runfile.Open(t.Context(), path, mode, runfile.Options{}); !errors.Is(err, tt.want) {
				t.Errorf("%s: %v, want %v", tt.name, err, tt.want)
			}
		}
		if after, err := os.ReadFile(path); err != nil || !bytes.Equal(before, after) {
			t.Errorf("%s: refusing changed the file (%v)", tt.name, err)
		}
	}
}
