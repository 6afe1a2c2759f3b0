package rules

import (
	"bytes"
	"encoding/gob"
	"errors"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor"
	"throatwatch/monitor/egt"
)

const (
	scan  = 50 * ms
	epoch = 1_800_000_000 * second
)

// testBands are the bands of an invented small turbojet.
func testBands() []egt.Band {
	return []egt.Band{
		{Name: "run_1", Kind: egt.KindRun, Limit: 993.15, Allowance: 5 * second, Deadband: 5, Rearm: 2 * second},
		{Name: "run_2", Kind: egt.KindRun, Limit: 1033.15, Deadband: 5, Rearm: 2 * second},
		{Name: "start", Kind: egt.KindStart, Limit: 1073.15, Allowance: 3 * second, PerRun: 30 * second, Deadband: 5, Rearm: 2 * second},
	}
}

func testDefault() []Rule {
	return Default(Equipment{Bands: testBands(), Limits: testLimits(), EGT: true, Rake: true, Speed: true, FuelFlow: true, Bellmouth: true, OnFile: true})
}

// stand runs a set of rules scan by scan.
type stand struct {
	t     testing.TB
	names []Name
	ix    index
	set   *Set
	st    State
	f     Frame
	phase monitor.Phase
	run   string
	next  int64 // event time of the next scan since epoch
	seen  []Alarm
}

func newStand(tb testing.TB, rules []Rule, derived ...Derived) *stand {
	tb.Helper()
	set, faults := Compile(rules, StandardNames(testChannels(), []string{"run_1", "run_2", "start"}), derived...)
	for _, f := range faults {
		tb.Errorf("rule %d (derived %v), %s: %s; %s", f.Rule, f.Derived, f.Field, f.Message, f.Hint)
	}
	if set == nil {
		tb.FailNow()
	}
	names := set.Names()
	return &stand{t: tb, names: names, ix: indexOf(names), set: set, f: NewFrame(names), run: "run-1"}
}

// put sets a name; "?" makes it unknown.
func (s *stand) put(name, value string) {
	s.t.Helper()
	slot, ok := s.ix[name]
	if !ok {
		s.t.Fatalf("no name %q", name)
	}
	switch {
	case s.names[slot].Type == Number && value == "?":
		s.f.Numbers[slot] = math.NaN()
	case s.names[slot].Type == Number:
		v, err := strconv.ParseFloat(value, 64)
		if err != nil {
			s.t.Fatal(err)
		}
		s.f.Numbers[slot] = v
	case s.names[slot].Type == Bool:
		s.f.Bools[slot] = map[string]Tri{"?": Unknown, "true": True, "false": False}[value]
	default:
		s.f.Texts[slot] = strings.Trim(value, "?")
		if name == "phase" {
			s.phase, _ = monitor.ParsePhase(value)
		}
	}
}

// to steps every scan before t, and at t if that is included.
func (s *stand) to(t int64, included bool) {
	for s.next < t || included && s.next == t {
		s.seen = s.set.Step(&s.st, epoch+s.next, s.run, s.phase, OfData, &s.f, s.seen)
		s.seen = s.set.Step(&s.st, epoch+s.next, s.run, monitor.PhaseUnknown, OfDaemon, &s.f, s.seen)
		s.next += scan
	}
}

func (s *stand) instance(rule string) *Instance {
	s.t.Helper()
	for i := range s.st.Instances {
		if s.st.Instances[i].Rule == rule {
			return &s.st.Instances[i]
		}
	}
	s.t.Fatalf("no rule %q", rule)
	return nil
}

// last gives the last that was told of a rule.
func (s *stand) last(rule string) Alarm {
	s.t.Helper()
	for _, a := range slices.Backward(s.seen) {
		if a.Rule == rule {
			return a
		}
	}
	s.t.Fatalf("nothing was told of %q", rule)
	return Alarm{}
}

// parseRule reads "NAME PRIORITY option… : expression".
func parseRule(tb testing.TB, line string) Rule {
	tb.Helper()
	head, when, _ := strings.Cut(line, " : ")
	f := strings.Fields(head)
	r := Rule{Name: f[0], When: when, Title: f[0], Text: f[0]}
	r.Priority, _ = ParsePriority(f[1])
	for _, o := range f[2:] {
		key, v, _ := strings.Cut(o, "=")
		switch key {
		case "on":
			r.OnDelay = duration(tb, v)
		case "off":
			r.OffDelay = duration(tb, v)
		case "deadband":
			r.Deadband, _ = strconv.ParseFloat(v, 64)
		case "worsen":
			by, unit, _ := strings.Cut(v, "_")
			r.WorsenBy, _ = strconv.ParseFloat(by, 64)
			r.WorsenUnit = unit
		case "value":
			r.Value = v
		case "unknown":
			word, after, _ := strings.Cut(v, ",")
			r.Unknown.Priority, _ = ParsePriority(word)
			r.Unknown.After = duration(tb, after)
		case "latching":
			r.Latching = true
		case "group":
			r.Group = v
		case "suppress":
			for p := range strings.SplitSeq(v, ",") {
				phase, _ := monitor.ParsePhase(p)
				r.SuppressIn = append(r.SuppressIn, phase)
			}
		default:
			tb.Fatalf("option %q", o)
		}
	}
	return r
}

func duration(tb testing.TB, s string) int64 {
	tb.Helper()
	d, err := time.ParseDuration(s)
	if err != nil {
		tb.Fatal(err)
	}
	return int64(d)
}

// TestScripts runs every script of testdata:
//
//	rules default
//	derive NAME KIND [over=…] : expression
//	rule NAME PRIORITY [on=…] [off=…] [deadband=…] [latching] [group=…] [value=NAME] [worsen=NUMBER_UNIT]
//	     [unknown=PRIORITY,DELAY] [suppress=PHASE,…] : expression
//	TIME set NAME=VALUE …            from the scan at TIME on; ? is unknown
//	TIME want RULE STATE [unknown]   after the scan at TIME
//	TIME text RULE TEXT              as rendered
//	TIME under RULE OTHER             is listed under the other's alarm; - is none
//	TIME first RULE …                of those that stand exactly these have the first-out mark
//	TIME value NAME VALUE            of a derived name, to 9 digits; ? is unknown
//	TIME gap DURATION                no scans for so long
//	TIME restart                     the state goes through its stored form
//	TIME act DO RULE [for=…] [role=…] [reason=…] [refused]
//	TIME transitions N               so many since the begin
//
// There is a scan each 50 ms from 0 s on.
func TestScripts(t *testing.T) {
	files, err := filepath.Glob("testdata/*.script")
	if err != nil || len(files) == 0 {
		t.Fatalf("no scripts: %v", err)
	}
	for _, file := range files {
		t.Run(strings.TrimSuffix(filepath.Base(file), ".script"), func(t *testing.T) {
			b, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			runScript(t, string(b))
		})
	}
}

func testLimits() egt.Limits {
	return egt.Limits{
		Spread: 90, Rise: 80, StarterOnce: 30 * int64(time.Second), StarterHour: 120 * int64(time.Second), StarterRuns: 2,
		Rundown: 8 * int64(time.Second), CoolFuelOff: 120 * int64(time.Second),
	}
}

func runScript(t *testing.T, script string) {
	t.Helper()
	var rules []Rule
	var derived []Derived
	var s *stand
	number := 0
	for line := range strings.Lines(script) {
		number++
		line = strings.TrimSpace(line)
		word, rest, _ := strings.Cut(line, " ")
		switch {
		case line == "" || word == "#":
			continue
		case line == "rules default":
			rules = append(rules, testDefault()...)
			continue
		case word == "rule":
			rules = append(rules, parseRule(t, rest))
			continue
		case word == "derive":
			derived = append(derived, parseDerived(t, rest))
			continue
		}
		if s == nil {
			s = newStand(t, rules, derived...)
		}
		at, verb := duration(t, word), ""
		verb, rest, _ = strings.Cut(strings.TrimSpace(rest), " ")
		f := strings.Fields(rest)
		if verb == "set" && s.next > at {
			t.Fatalf("line %d: %s: the scan at that time is over", number, line)
		}
		s.to(at, verb != "set")
		switch verb {
		case "set":
			for _, pair := range f {
				name, v, _ := strings.Cut(pair, "=")
				s.put(name, v)
			}
		case "want":
			in := s.instance(f[0])
			if in.State.String() != f[1] || in.Unknown != (len(f) > 2 && f[2] == "unknown") {
				t.Errorf("line %d: %s: %v (unknown %v)", number, line, in.State, in.Unknown)
			}
		case "text":
			rule, text, _ := strings.Cut(rest, " ")
			if got := s.instance(rule).Text; got != strings.TrimSpace(text) {
				t.Errorf("line %d: got text\n%s\nwant\n%s", number, got, strings.TrimSpace(text))
			}
		case "under":
			under := ""
			if f[1] != "-" {
				under = s.instance(f[1]).ID
			}
			if got := s.instance(f[0]).Under; got != Ref(under) || s.st.Moved {
				t.Errorf("line %d: %s: %q", number, line, got)
			}
		case "first":
			for i := range s.st.Instances {
				if in := &s.st.Instances[i]; in.State.Standing() && in.FirstOut != slices.Contains(f, in.Rule) {
					t.Errorf("line %d: %s: %s has the mark: %v", number, line, in.Rule, in.FirstOut)
				}
			}
		case "value":
			s.value(number, f[0], f[1])
		case "gap":
			s.next += duration(t, f[0])
		case "restart":
			s.restart()
		case "act":
			s.act(number, at, f)
		case "transitions":
			if n, _ := strconv.Atoi(f[0]); n != len(s.seen) {
				t.Errorf("line %d: %d transitions, want %d", number, len(s.seen), n)
			}
		default:
			t.Fatalf("line %d: %s", number, line)
		}
	}
}

// parseDerived reads "NAME KIND option… : expression".
func parseDerived(tb testing.TB, line string) Derived {
	tb.Helper()
	head, of, _ := strings.Cut(line, " : ")
	f := strings.Fields(head)
	d := Derived{Name: f[0], Of: of, Period: scan}
	d.Kind, _ = ParseDerivation(f[1])
	if len(f) > 2 {
		d.Over = duration(tb, strings.TrimPrefix(f[2], "over="))
	}
	return d
}

// value checks a derived name.
func (s *stand) value(line int, name, want string) {
	s.t.Helper()
	got := s.f.Numbers[s.ix[name]]
	if want == "?" {
		if got == got {
			s.t.Errorf("line %d: %s is %g, want it unknown", line, name, got)
		}
		return
	}
	v, err := strconv.ParseFloat(want, 64)
	if err != nil || !(math.Abs(got-v) <= 1e-9*max(1, math.Abs(v))) {
		s.t.Errorf("line %d: %s is %.12g, want %s", line, name, got, want)
	}
}

// restart encodes the state and goes on with what is decoded, and a new frame.
func (s *stand) restart() {
	s.t.Helper()
	var b bytes.Buffer
	var st State
	err := gob.NewEncoder(&b).Encode(&s.st)
	if err == nil {
		err = gob.NewDecoder(&b).Decode(&st)
	}
	if err != nil {
		s.t.Fatal(err)
	}
	if !reflect.DeepEqual(st, s.st) {
		s.t.Error("the state comes back another")
	}
	s.st = st
}

func (s *stand) act(line int, at int64, f []string) {
	s.t.Helper()
	in := s.instance(f[1])
	a := Action{Do: f[0], Alarm: f[1], Revision: in.Revision, By: "Mara", Role: "operator", Phase: s.phase}
	for _, o := range f[2:] {
		key, v, _ := strings.Cut(o, "=")
		switch key {
		case "for":
			a.For = duration(s.t, v)
		case "role":
			a.Role = v
		case "reason":
			a.Reason = v
		}
	}
	before := *in
	alarm, err := s.set.Act(&s.st, epoch+at, a)
	if slices.Contains(f, "refused") {
		if !errors.Is(err, ErrRefused) || *in != before {
			s.t.Errorf("line %d: %v: error %v, instance changed %v", line, f, err, *in != before)
		}
		return
	}
	if err != nil {
		s.t.Errorf("line %d: %v: %v", line, f, err)
	}
	s.seen = append(s.seen, alarm)
}
