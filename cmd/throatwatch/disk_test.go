package main

import (
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"throatwatch/ingest/mqtt/mqtttest"
)

// smallDisk is a data folder on a disk that a test can fill.
type smallDisk struct {
	t    *testing.T
	data string
	root string // of a file system of its own; "" where this user may make none
}

// newSmallDisk makes a file system in memory. Where this user may not, the process
// under test gets a limit to the size of its files instead.
func newSmallDisk(t *testing.T) *smallDisk {
	t.Helper()
	root := t.TempDir()
	err := syscall.Mount("tmpfs", root, "tmpfs", 0, "size=256m")
	if errors.Is(err, syscall.EPERM) {
		t.Log("no file system may be mounted: the size of files is limited instead")
		return &smallDisk{t: t, data: filepath.Join(root, "data")}
	}
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(root, syscall.MNT_DETACH); err != nil {
			t.Error(err)
		}
	})
	return &smallDisk{t: t, data: filepath.Join(root, "data"), root: root}
}

// fill leaves so many bytes, at most.
func (d *smallDisk) fill(p *program, left int64) {
	d.t.Helper()
	if d.root == "" {
		d.limit(p, "1024")
		return
	}
	var st syscall.Statfs_t
	if err := syscall.Statfs(d.root, &st); err != nil {
		d.t.Fatal(err)
	}
	f, err := os.CreateTemp(d.root, "ballast")
	if err != nil {
		d.t.Fatal(err)
	}
	piece := make([]byte, 1<<16)
	for n := int64(st.Bavail)*st.Bsize - left; n > 0 && err == nil; n -= int64(len(piece)) {
		_, err = f.Write(piece)
	}
	if err := f.Close(); err != nil {
		d.t.Fatal(err)
	}
}

// empty makes room again.
func (d *smallDisk) empty(p *program) {
	d.t.Helper()
	if d.root == "" {
		d.limit(p, "unlimited")
		return
	}
	ballast, err := filepath.Glob(filepath.Join(d.root, "ballast*"))
	if err != nil || len(ballast) == 0 {
		d.t.Fatalf("%q, %v", ballast, err)
	}
	for _, path := range ballast {
		if err := os.Remove(path); err != nil {
			d.t.Fatal(err)
		}
	}
}

func (d *smallDisk) limit(p *program, bytes string) {
	d.t.Helper()
	out, err := exec.CommandContext(d.t.Context(), "prlimit", "--pid", fmt.Sprint(p.cmd.Process.Pid), "--fsize="+bytes+":unlimited").CombinedOutput()
	if err != nil {
		d.t.Fatalf("%v: %s", err, out)
	}
}

// TestFullDisk fills the disk under a run and makes room again: there is an alarm
// before it is full, and when it is full the watch goes on and says that nothing is
// stored. In the end the run is stored but for a gap that is told, and steps again to
// its digest.
func TestFullDisk(t *testing.T) {
	t.Parallel()
	d := newSmallDisk(t)
	floor := "0.1"
	if d.root == "" {
		floor = "1000000" // the disk of the machine is little
	}
	p := start(t, "watch", testRig(t), "--data", d.data, "--disk-gb", floor, "--disk-hours", "0", "--listen", "127.0.0.1:0",
		"--broker", mqtttest.Mosquitto(t).URL, "--rehearse", "--quick", "--speed", "2")
	live := follow(t, p.page(), "")
	alarmIs := func(rule, state string) func(*frame) bool {
		return func(f *frame) bool { return f.Kind == "alarm" && f.Alarm.Rule == rule && f.Alarm.State == state }
	}
	started := live.await("start of the run", isRun("started"))
	if d.root != "" {
		d.fill(p, 90e6)
	}
	low := live.await("the disk is little", alarmIs("disk_low", "unacknowledged"))
	if a := low.Alarm; a.Priority != "caution" || !strings.Contains(a.Text, " GB left") {
		t.Errorf("the disk is told as %+v", a)
	}
	d.fill(p, 0)
	lost := live.await("nothing is recorded", alarmIs("not_recording", "unacknowledged"))
	if lost.N <= low.N {
		t.Errorf("it told that nothing is recorded (%d) before it told that the disk is little (%d)", lost.N, low.N)
	}
	live.await("a point while the disk is full", func(f *frame) bool { return f.Kind == "operating_point" && f.N > lost.N+100 })
	time.Sleep(time.Second) // of a full disk
	d.empty(p)
	live.await("recording again", alarmIs("not_recording", "returned_unacknowledged"))
	if d.root != "" {
		live.await("the disk is well", alarmIs("disk_low", "returned_unacknowledged"))
	}
	ended := live.await("end of the run", isRun("ended"))
	p.stop()

	code, said, stderr := verifyAll(t, d.data)
	run := said[ended.Run.ID+".db"]
	if code != 0 || run.Digest != digestSame || run.State != "ended" || ended.Run.ID != started.Run.ID {
		t.Errorf("exit code %d: %+v\n%s", code, said, stderr)
	}
}
