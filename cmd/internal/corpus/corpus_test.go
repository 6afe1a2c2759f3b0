package corpus

import (
	"bytes"
	"encoding/json"
	"math"
	"os"
	"reflect"
	"strconv"
	"strings"
	"testing"

	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

const rig = "../../../testdata/rigs/example.yaml"

func open(tb testing.TB) *Corpus {
	tb.Helper()
	c, err := Open(rig)
	if err != nil {
		tb.Fatal(err)
	}
	return c
}

// TestShort plays a seeded part of the corpus: no alarm may be missed, false or
// chattering, and the naive rules must be worse, or the part is too easy.
func TestShort(t *testing.T) {
	o := Short(2)
	least, naively := 50, 1 // events, and false alarms of the naive rules
	if testing.Short() {
		o.kinds, least, naively = 2, 2, 0
	}
	report, err := open(t).Run(t.Context(), o, nil)
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range report.Mishaps {
		t.Error(m)
	}
	if report.Failed() != (len(report.Mishaps) > 0) {
		t.Error("the report does not know whether it failed")
	}
	events, naive := 0, Count{}
	for i := range report.Rows {
		events += report.Rows[i].Expected
	}
	for i := range report.Naive {
		naive.add(report.Naive[i].Count)
	}
	if events < least || report.Hours < o.Hours || naive.False < naively {
		t.Errorf("%d events, %.1f h of calm, naive rules %+v: too little to tell", events, report.Hours, naive)
	}
	var table, lines bytes.Buffer
	if err := report.WriteTable(&table); err != nil {
		t.Fatal(err)
	}
	if err := report.WriteJSON(&lines); err != nil {
		t.Fatal(err)
	}
	t.Log(table.String())
	for line := range strings.SplitSeq(strings.TrimSpace(lines.String()), "\n") {
		var row map[string]any
		if err := json.Unmarshal([]byte(line), &row); err != nil {
			t.Fatalf("%s: %v", line, err)
		}
		for _, key := range []string{"rule", "expected", "detected", "missed", "false", "chattering", "delay_scans_max"} {
			if _, ok := row[key]; !ok {
				t.Errorf("%s has no %q", line, key)
			}
		}
	}
}

// A corpus that sees no difference proves nothing: with rules that are wrong in the
// daemon and right in the truth it must tell.
func TestSabotage(t *testing.T) {
	for _, tt := range []struct {
		name, rule, what string
		kind, n          int
		change           func(r *rules.Rule)
	}{
		{"a rule that is slow", "unchoke", "late", 2, 0, func(r *rules.Rule) { r.OnDelay += second }},
		{"a rule that never speaks", "unchoke", "missed", 2, 0, func(r *rules.Rule) { r.When = "npr > 99" }},
		{"a rule that speaks too soon", "unchoke", "false", 2, 0, func(r *rules.Rule) { r.When = "choke_armed and npr < 2.05"; r.OnDelay = 0 }},
	} {
		t.Run(tt.name, func(t *testing.T) {
			c := open(t)
			parse := c.parse
			c.parse = func(b []byte) (pipeline.Config, error) {
				cfg, err := parse(b)
				for i := range cfg.Rules {
					if cfg.Rules[i].Name == tt.rule {
						tt.change(&cfg.Rules[i])
					}
				}
				return cfg, err
			}
			res, err := c.play(newRun(&c.cfg, 1, tt.kind, tt.n))
			if err != nil {
				t.Fatal(err)
			}
			seen := 0
			for _, m := range res.mishaps {
				if m.Rule == tt.rule && m.What == tt.what {
					seen++
				}
			}
			if seen == 0 {
				t.Errorf("not told; mishaps %v", res.mishaps)
			}
		})
	}
}

// What is measured depends on seed and number of the run alone.
func TestSameRunSameResult(t *testing.T) {
	c := open(t)
	one, err := c.play(newRun(&c.cfg, 7, 0, 3))
	if err != nil {
		t.Fatal(err)
	}
	two, err := c.play(newRun(&c.cfg, 7, 0, 3))
	if err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(one, two) {
		t.Errorf("%+v\n%+v", one, two)
	}
	if reflect.DeepEqual(newRun(&c.cfg, 7, 0, 3), newRun(&c.cfg, 8, 0, 3)) {
		t.Error("another seed gives the same run")
	}
}

// Expectations follow from the definitions in the package comment; scans of 50 ms.
func TestJudge(t *testing.T) {
	const ms = second / 1000
	grant := terms{period: 50 * ms, slack: 200 * ms, allowed: 220 * ms}
	hold := func(from, to int64) func(int64) condition {
		return func(t int64) condition { return plain(t >= from && t <= to, t >= from && t <= to) }
	}
	for _, tt := range []struct {
		name   string
		truth  func(t int64) condition
		delay  int64
		raises []raise
		terms  terms
		want   Count
	}{
		{"detected in time", hold(2*second, 4*second), second, []raise{{t: 3000 * ms, host: 3150 * ms}}, grant, Count{Expected: 1, Detected: 1, Delay: 3}},
		{"missed", hold(2*second, 4*second), second, nil, grant, Count{Expected: 1, Missed: 1}},
		{"late is missed", hold(2*second, 4*second), second, []raise{{t: 3400 * ms, host: 3500 * ms}}, grant, Count{Expected: 1, Missed: 1}},
		{"shorter than the on-delay", hold(2*second, 2900*ms), second, nil, grant, Count{}},
		{"there before, and still", hold(2*second, 4*second), second, []raise{{t: 2900 * ms, host: 2950 * ms, end: 5 * second}}, grant, Count{Expected: 1, Detected: 1}},
		{"there before, and gone", hold(2*second, 4*second), second, []raise{{t: 2900 * ms, host: 2950 * ms, end: 2950 * ms}}, grant, Count{Expected: 1, Missed: 1}},
		{"false", hold(2*second, 4*second), second, []raise{{t: 3 * second, host: 3 * second, end: 5 * second}, {t: 7 * second, host: 7 * second}}, grant, Count{Expected: 1, Detected: 1, False: 1}},
		{"free", func(t int64) condition { return plain(t > 2*second && t < 4*second, false) }, 0, []raise{{t: 3 * second, host: 3 * second}}, grant, Count{}},
		{"suppressed", func(t int64) condition { return condition{may: true, must: true, mayGate: t > 5*second} }, 0, []raise{{t: second, host: second}}, grant, Count{False: 1}},
		{
			"chattering", hold(2*second, 9*second), 0,
			[]raise{{t: 2 * second, host: 2 * second, end: 3 * second}, {t: 4 * second, host: 4 * second, end: 5 * second}, {t: 6 * second, host: 6 * second, end: 7 * second}},
			grant,
			Count{Expected: 1, Detected: 1, Chattering: 1},
		},
		{
			"the daemon was away", hold(2*second, 4*second), second,
			[]raise{{t: 3 * second, host: 6 * second}},
			terms{period: 50 * ms, slack: 200 * ms, allowed: 220 * ms, outages: []span{{2500 * ms, 6 * second}}},
			Count{Expected: 1, Detected: 1},
		},
	} {
		t.Run(tt.name, func(t *testing.T) {
			e := expectation{rule: "x", onDelay: tt.delay}
			for at := 50 * ms; at < 10*second; at += 50 * ms {
				e.step(at, 50*ms, tt.truth(at))
			}
			got, _ := e.judge(&behaviour{tt.raises}, &tt.terms)
			if got != tt.want {
				t.Errorf("got %+v, want %+v; %+v", got, tt.want, e)
			}
		})
	}
}

// By hand: 5 K above for 3 s, a dip into the deadband, and 3 s again are 6 s; a dip
// below it for the re-arm time ends that.
func TestAllowance(t *testing.T) {
	a := allowance{above: 990, below: 985, rearm: 2 * second}
	step := int64(0)
	hold := func(v float64, d int64) {
		for end := step + d; step < end; step += second / 20 {
			a.step(step+second, second/20, v, true)
		}
	}
	hold(995, 3*second)
	hold(987, 5*second)
	hold(995, 3*second)
	hold(980, second)
	if a.elapsed != 6*second || !a.on {
		t.Errorf("elapsed %d ns, on %v; want 6 s", a.elapsed, a.on)
	}
	hold(980, 2*second)
	if a.on || a.elapsed != 0 || a.total != 6*second {
		t.Errorf("after the re-arm time: %+v", a)
	}
	if a.step(step, second, 1000, false); a.on {
		t.Error("a band that is not in force begins an excursion")
	}
}

// The table is the one of the vectors, and what is between its points lies within
// what the comment states of Cantera's other fits [testdata/vectors/cantera.csv].
func TestCriticalNPR(t *testing.T) {
	for file, tol := range map[string]float64{"thermally_perfect.csv": 1e-9, "cantera.csv": 1e-3} {
		text, err := os.ReadFile("../../../testdata/vectors/" + file)
		if err != nil {
			t.Fatal(err)
		}
		rows := 0
		for line := range strings.SplitSeq(string(text), "\n") {
			cells := strings.Split(line, ",")
			number := func(i int) float64 {
				v, err := strconv.ParseFloat(cells[i], 64)
				if err != nil {
					return math.NaN()
				}
				return v
			}
			if strings.HasPrefix(line, "#") || len(cells) < 10 {
				continue
			}
			f, t0, want := number(1), number(2), number(8)
			if file == "cantera.csv" {
				f, want = number(0), 1/number(9)
			} else if cells[0] != "kerosene_products" {
				continue
			}
			if !(f >= 0.01 && f <= 0.03 && t0 >= 300 && t0 <= 1300) {
				continue
			}
			rows++
			if got := criticalNPR(f, t0); math.Abs(got/want-1) > tol {
				t.Errorf("%s: f %g, %g K: %.6f, want %.6f", file, f, t0, got, want)
			}
		}
		if rows == 0 {
			t.Errorf("%s has no rows", file)
		}
	}
}

func TestOpenErrors(t *testing.T) {
	for name, want := range map[string]string{"../../../testdata/rigs/none.yaml": "no file", "../../../testdata/rigs/minimal.yaml": "is needed"} {
		if _, err := Open(name); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v", name, err)
		}
	}
}
