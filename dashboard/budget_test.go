package dashboard_test

import (
	"math"
	"net/http"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor/compute"
)

// budget is what these tests read of a budget.
type budget struct {
	T       string
	Scan    uint64
	Outputs []struct {
		Quantity string
		Value    *float64
		U95      *float64
		Inputs   []struct {
			Input string
			Share *float64
			Parts []struct {
				Channel *string
				What    string
				Share   *float64
			}
		}
	}
}

// The budget is that of the last operating point: same values, same uncertainties, shares
// that make one, channels by id and title.
func TestBudget(t *testing.T) {
	d := newDesk(t)
	if a := d.get(t, rigPath+"/budget"); a.status != http.StatusServiceUnavailable || !strings.Contains(string(a.body), "no budget") {
		t.Errorf("before the first scan: %d %s", a.status, a.body)
	}
	d.send(play(start, engineTest(), 24*time.Second, nil))
	point := into[map[string]any](t, d.get(t, rigPath+"/operating-point"))
	b := into[budget](t, d.get(t, rigPath+"/budget"))
	if b.T != point["t"] || float64(b.Scan) != point["scan"] || len(b.Outputs) != 4 {
		t.Fatalf("budget of %s, scan %d, %d outputs; point of %v, scan %v", b.T, b.Scan, len(b.Outputs), point["t"], point["scan"])
	}
	named := map[string]string{}
	for _, o := range b.Outputs {
		if o.Value == nil || *o.Value != point[o.Quantity] || o.U95 == nil || *o.U95 != point[o.Quantity+"_u95"] {
			t.Errorf("%s differs from the operating point", o.Quantity)
		}
		sum := 0.0
		for _, in := range o.Inputs {
			for _, p := range in.Parts {
				sum += *p.Share
				if p.Channel != nil {
					named[*p.Channel] = p.What
				}
			}
		}
		if math.Abs(sum-1) > 1e-9 {
			t.Errorf("the parts of %s make %g", o.Quantity, sum)
		}
	}
	_, cfg := d.config()
	for _, id := range []string{"p7_1", "p_baro", "t7_2"} {
		i := slices.IndexFunc(cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == id })
		if want := cfg.Compute.Channels[i].Title; named[id] != want {
			t.Errorf("%s is called %q, want %q", id, named[id], want)
		}
	}
	if a := d.get(t, "/api/rigs/other/budget"); a.status != http.StatusNotFound {
		t.Errorf("another rig: %d", a.status)
	}
}
