package dashboard_test

import (
	"testing"
	"time"

	"throatwatch/dashboard"
	"throatwatch/ingest"
)

// A watch of a pair tells in its hello, over HTTP too, and each second how it stands; one
// that is alone says nothing of it.
func TestSpeaking(t *testing.T) {
	alone := checkJSON(t, "HelloFrame", newDesk(t).get(t, "/api/rigs/"+rigID+"/hello").body)
	if _, there := alone["status"].(map[string]any)["speaking"]; there {
		t.Errorf("alone: %v", alone["status"])
	}
	d := newBareDesk(t)
	name, since := "alpha", time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	d.hub.Speaking = func() dashboard.Speaking {
		return dashboard.Speaking{Watch: "beta", Name: &name, Since: &since, Other: &name}
	}
	d.begin()
	v := d.view(t, "")
	d.take(ingest.KindTick, "", start+2*second)
	frames, _ := v.until(func(f [][]byte) bool { return len(f) > 0 && headOf(f[len(f)-1]).Kind == "status" })
	for kind, path := range map[string]string{"HelloFrame": "status.speaking", "StatusFrame": "speaking"} {
		body := frames[0]
		if kind == "StatusFrame" {
			body = frames[len(frames)-1]
		}
		f := checkJSON(t, kind, body)
		for key, want := range map[string]any{"watch": "beta", "name": "alpha", "since": "2026-03-02T09:00:00Z", "other": "alpha", "why": ""} {
			if got := dig(f, path+"."+key); got != want {
				t.Errorf("%s: %s is %v, want %v", kind, key, got, want)
			}
		}
	}
}
