package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"throatwatch/ingest/runfile"
)

// verifyAll runs verify --all --json and gives what it says of each file, by base name.
func verifyAll(t *testing.T, data string) (code int, said map[string]verified, stderr string) {
	t.Helper()
	code, stdout, stderr := invoke(t, "verify", "--all", "--json", "--data", data)
	said = map[string]verified{}
	for line := range strings.Lines(stdout) {
		var v verified
		if err := json.Unmarshal([]byte(line), &v); err != nil {
			t.Fatalf("%v: %s", err, line)
		}
		said[filepath.Base(v.File)] = v
	}
	return code, said, stderr
}

// Verify finds nothing in what was recorded, and names every kind of damage.
func TestVerify(t *testing.T) {
	data := dataFolder(t)
	id := rehearsed(t, data)
	path := filepath.Join(data, "runs", id+".db")
	code, said, stderr := verifyAll(t, data)
	run := said[id+".db"]
	if code != 0 || len(said) != 3 || run.Digest != digestSame || run.State != "ended" || run.Records < 1000 || run.Chunks < 2 || run.Events < 2 {
		t.Fatalf("exit code %d: %+v\n%s", code, said, stderr)
	}
	if code, stdout, _ := invoke(t, "verify", id, "--data", data); code != 0 || !strings.Contains(stdout, "no fault found; stepped again, the digest is that recorded live") {
		t.Errorf("exit code %d: %s", code, stdout)
	}
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	write := func(content []byte) {
		t.Helper()
		if err := os.WriteFile(path, content, 0o600); err != nil {
			t.Fatal(err)
		}
	}
	edit := func(how func(*runfile.Header)) {
		t.Helper()
		f, err := runfile.Open(t.Context(), path, runfile.ReadWrite, runfile.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if err := errors.Join(f.UpdateHeader(t.Context(), how), f.Close()); err != nil {
			t.Fatal(err)
		}
	}
	for _, tt := range []struct {
		name   string
		damage func()
		digest string
		says   string
	}{
		{"a byte of a chunk", func() {
			content := bytes.Clone(whole)
			i := bytes.LastIndex(content, []byte("twa\x02")) // begin of a chunk, as the archive's format says
			content[i+20] ^= 4
			write(content)
		}, digestNotStepped, "chunks row "},
		{"a cut file", func() { write(whole[:len(whole)*2/3]) }, digestNotStepped, "damaged"},
		{"no run file", func() { write([]byte("something else")) }, digestNotStepped, "not a database"},
		{"another digest", func() {
			edit(func(h *runfile.Header) { h.Digest = strings.Repeat("0", 64) })
		}, digestDiffers, "recorded live was 0000"},
		{"another build", func() {
			edit(func(h *runfile.Header) { h.Digest, h.Build = strings.Repeat("0", 64), "another" })
		}, digestOtherBuild, "list of runs: run "}, // the list says another digest
		{"gone", func() {
			if err := os.Remove(path); err != nil {
				t.Fatal(err)
			}
		}, "", "the file of run " + id + " is gone"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			write(whole)
			tt.damage()
			code, said, stderr := verifyAll(t, data)
			var faults []string
			for _, v := range said {
				faults = append(faults, v.Faults...)
			}
			all := strings.Join(faults, "\n")
			if code != 1 || !strings.Contains(all, tt.says) || !strings.Contains(all, id) {
				t.Errorf("exit code %d: %s", code, all)
			}
			if said[id+".db"].Digest != tt.digest {
				t.Errorf("the digest is %q, want %q", said[id+".db"].Digest, tt.digest)
			}
			if !strings.Contains(stderr, "look for a copy of them") {
				t.Errorf("it says %s", stderr)
			}
		})
	}
}

// A copy of a run is a run: it has the same digest when it is put into another folder.
func TestCopy(t *testing.T) {
	data := dataFolder(t)
	id := rehearsed(t, data)
	other := filepath.Join(dataFolder(t), "runs")
	if err := os.MkdirAll(other, 0o750); err != nil {
		t.Fatal(err)
	}
	to := filepath.Join(other, id+".db")
	if code, stdout, stderr := invoke(t, "copy", id, "--to", to, "--data", data); code != 0 || !strings.Contains(stdout, "up to record") {
		t.Fatalf("exit code %d: %s%s", code, stdout, stderr)
	}
	if code, _, stderr := invoke(t, "copy", id, "--to", to, "--data", data); code != 1 || !strings.Contains(stderr, "give another --to") {
		t.Errorf("over a file: exit code %d: %s", code, stderr)
	}
	if run, _ := replayed(t, filepath.Dir(other)); run.ID != id {
		t.Errorf("the copy is run %s", run.ID)
	}
}
