package main

import (
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/faults"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/broker/brokertest"
	"throatwatch/ingest/mqtt/mqtttest"
)

// TestCluster kills the node of a cluster of three that a watch is connected to. The
// watch goes on at another: it is silent for 15 s at most, says so by an alarm, and
// nothing that the cluster has taken is lost. Elections take the cluster up to 11 s,
// measured.
func TestCluster(t *testing.T) {
	var addrs [6]string
	for i := range addrs {
		addrs[i] = mqtttest.FreeAddr(t)
	}
	c := brokertest.Start(t, dataFolder(t), addrs)
	rig, data := testRig(t, [2]string{"lateness: 120 ms", "lateness: 500 ms"}), dataFolder(t)
	_, cfg, wrong := config.Load(rig)
	if err := watch.Faults(wrong); err != nil {
		t.Fatal(err)
	}
	p := start(t, "watch", rig, "--data", data, "--listen", "127.0.0.1:0", "--broker", strings.Join(c.URLs, ","))
	f := follow(t, p.page(), "")
	f.await("the sessions are up", allConnected)
	others := slices.Concat(c.URLs[1:], c.URLs[:1])
	system := publishTest(t, cfg, strings.Join(others, ","), 14*time.Second)
	awaitRun(t, p.page())
	time.Sleep(2 * time.Second) // in the middle of the data
	killed := time.Now()
	c.Kill(0)
	<-system.ended
	ended := time.Now()
	if system.err != nil {
		t.Fatalf("the data system: %v", system.err)
	}
	last := time.Unix(0, system.published[len(system.published)-1].At)
	f.await("the last scan", func(f *frame) bool {
		scan, err := time.Parse(time.RFC3339Nano, f.T)
		return f.Kind == "operating_point" && err == nil && !scan.Before(last)
	})
	p.stop()

	var silence float64 // s
	alarmed := ""
	for _, f := range f.seen() {
		switch {
		case f.Kind == "status" && f.at.After(killed) && f.at.Before(ended):
			silence = max(silence, f.Age)
		case f.Kind == "alarm" && f.at.After(killed) && (f.Alarm.Rule == "source_lost" || f.Alarm.Rule == "input_path_deaf"):
			alarmed = f.Alarm.Rule
		}
	}
	t.Logf("the newest data was %.1f s old, alarm %q", silence, alarmed)
	if silence > 15 {
		t.Errorf("no data for %.1f s; 15 s are promised", silence)
	}
	if silence > 4 && alarmed == "" {
		t.Errorf("no data for %.1f s, and no alarm", silence)
	}
	counts, err := faults.Count(t.Context(), data, &cfg, system.published)
	if err != nil {
		t.Fatal(err)
	}
	// What comes while the cluster elects is late where the publisher's node was connected
	// on: it is recorded and counted, and no scan has waited for it.
	counts.Silent = true
	if t.Logf("%+v", counts); !counts.Lossless() {
		t.Error("something is lost")
	}
}
