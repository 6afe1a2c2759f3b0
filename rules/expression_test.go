package rules

import (
	"math"
	"strings"
	"testing"

	"throatwatch/monitor/unit"
)

// bench is a small environment with values, for tests.
func testNames() []Name {
	return StandardNames(testChannels(), []string{"run_1", "start"})
}

func testChannels() []Channel {
	return []Channel{
		{ID: "p_oil", Dimension: unit.Pressure, Low: 0, High: 900e3},
		{ID: "p7_1", Dimension: unit.Pressure},
		{ID: "vibration", Dimension: unit.Velocity},
	}
}

// values fills a frame from name, value pairs.
func fill(tb testing.TB, names []Name, values map[string]any) *Frame {
	tb.Helper()
	f, ix := NewFrame(names), indexOf(names)
	for name, v := range values {
		slot, ok := ix[name]
		if !ok {
			tb.Fatalf("no name %q", name)
		}
		switch v := v.(type) {
		case float64:
			f.Numbers[slot] = v
		case int:
			f.Numbers[slot] = float64(v)
		case bool:
			f.Bools[slot] = TriOf(v)
		case string:
			f.Texts[slot] = v
		default:
			tb.Fatalf("value %v", v)
		}
	}
	return &f
}

func TestExpressions(t *testing.T) {
	names := testNames()
	f := fill(t, names, map[string]any{
		"npr": 1.8, "choke_npr": 2.0, "choke_margin_percent": -10, "speed_rpm": 20000, "mass_flow_kg_s": 0,
		"channel.p_oil": 250e3, "quality.p_oil": "good", "usable.p_oil": true,
		"choke_armed": true, "choke_state": "unchoked", "phase": "unknown", "egt.run_1.over": true,
	})
	// Known values are ordinary arithmetic and logic. Unknown follows Kleene's
	// strong three-valued logic (Introduction to Metamathematics, 1952, § 64);
	// lit, egt_indicated_k and phase are unknown here.
	tests := []struct {
		src  string
		want Tri
	}{
		{"npr < choke_npr", True},
		{"npr > choke_npr", False},
		{"npr <= 1.8 and npr >= 1.8 and npr == 1.8", True},
		{"npr < 1.8 or npr > 1.8 or npr != 1.8", False},
		{"1.5 < npr", True},
		{"1.5 > npr", False},
		{"1.5 < npr < 1.9", True},
		{"npr / choke_npr - 1 < 0", True},
		{"-npr + 2 * 3 > 4.1", True},
		{"+npr > 1", True},
		{"abs(choke_margin_percent) == 10", True},
		{"min(npr, choke_npr, 3) == 1.8 && max(npr, choke_npr) == 2", True},
		{`choke_armed and choke_state == "unchoked"`, True},
		{`choke_state != 'choked'`, True},
		{"channel.p_oil < 300e3 and usable.p_oil", True},
		{`quality.p_oil == "stale"`, False},
		{"not egt.run_1.over", False},
		{"!choke_armed || !egt.run_1.over", False},
		{"choke_armed == egt.run_1.over", True},
		{"choke_armed != true", False},
		{"choke_armed ? npr < 2 : lit", True},
		{"(choke_armed ? npr : p_choked) < 2", True},
		{`(choke_armed ? choke_state : phase) == "unchoked"`, True},

		{"egt_indicated_k > 900", Unknown},
		{"900 < egt_indicated_k", Unknown},
		{"egt_indicated_k != egt_indicated_k", Unknown},
		{"not (egt_indicated_k <= 900)", Unknown},
		{"max(egt_indicated_k, 3) > 1", Unknown},
		{"min(3, egt_indicated_k) > 1", Unknown},
		{"abs(egt_indicated_k) > 1", Unknown},
		{"egt_indicated_k + egt_spread_k > 1", Unknown},
		{"npr / mass_flow_kg_s > 1", Unknown}, // no quotient by zero
		{"1e308 * 10 * npr > 1", Unknown},     // overflows
		{"lit", Unknown},
		{"not lit", Unknown},
		{"lit == lit", Unknown},
		{`phase == "idle"`, Unknown},
		{`phase != "idle"`, Unknown},
		{"lit and true", Unknown},
		{"lit or false", Unknown},
		{"lit and false", False},
		{"false and lit", False},
		{"lit or true", True},
		{"choke_armed or lit", True},
		{"lit ? true : true", Unknown},
		{"(lit ? 1 : 2) > 0", Unknown},
		{`(lit ? phase : choke_state) == "idle"`, Unknown},

		{"known(npr)", True},
		{"known(egt_indicated_k)", False},
		{"not known(lit)", True},
		{"known(choke_armed)", True},
		{"known(phase)", False},
		{"known(choke_state) and known(channel.p_oil)", True},
		{"known(channel.vibration) and channel.vibration > 1", False},
	}
	for _, tt := range tests {
		c, fault := compileExpression(tt.src, names, indexOf(names))
		if fault != nil {
			t.Errorf("%s: %+v", tt.src, *fault)
			continue
		}
		if got := c.truth(f, 0); got != tt.want {
			t.Errorf("%s: got %v, want %v", tt.src, got, tt.want)
		}
	}
}

func TestKleeneTables(t *testing.T) {
	// The tables of and, or, not, written out from Kleene (1952), § 64, in the
	// order false, unknown, true.
	all := []Tri{False, Unknown, True}
	andTable := [3][3]Tri{{False, False, False}, {False, Unknown, Unknown}, {False, Unknown, True}}
	orTable := [3][3]Tri{{False, Unknown, True}, {Unknown, Unknown, True}, {True, True, True}}
	at := func(v Tri) boolFunc { return func(*Frame, float64) Tri { return v } }
	for i, a := range all {
		for j, b := range all {
			if got := and(at(a), at(b))(nil, 0); got != andTable[i][j] {
				t.Errorf("%v and %v: %v", a, b, got)
			}
			if got := or(at(a), at(b))(nil, 0); got != orTable[i][j] {
				t.Errorf("%v or %v: %v", a, b, got)
			}
		}
	}
}

func TestDeadbandKeepsTheRuleTrue(t *testing.T) {
	// x is npr, y is choke_npr. While the alarm is up the rule returns only
	// beyond the threshold by the deadband of 2: each row is true up to that.
	names := testNames()
	tests := []struct {
		src          string
		x, y         float64
		down, up     Tri // without and with the deadband
		subject      string
		rulesByFall  bool
		hasThreshold bool
	}{
		{"npr < 10", 11, 0, False, True, "npr", true, true},
		{"npr < 10", 12.5, 0, False, False, "npr", true, true},
		{"npr > 10", 9, 0, False, True, "npr", false, true},
		{"npr > 10", 7.5, 0, False, False, "npr", false, true},
		{"10 > npr", 11, 0, False, True, "npr", true, true},
		{"10 <= npr", 9, 0, False, True, "npr", false, true},
		{"npr < choke_npr", 11, 10, False, True, "npr", true, true},
		{"not (npr < 10)", 9, 0, False, True, "npr", false, true},
		{"not (npr < 10)", 7.5, 0, False, False, "npr", false, true},
		{"not (not (npr < 10))", 11, 0, False, True, "npr", true, true},
		{"choke_npr > 5 and not (npr >= 10)", 11, 4, False, True, "choke_npr", false, true},
		{"npr + 1 < 10", 10, 0, False, True, "", false, true},
		{"true ? npr < 10 : false", 11, 0, False, True, "npr", true, true},
		{"(npr < 10) == true", 11, 0, False, False, "npr", true, true}, // either side could be meant: none is moved
		{"npr == 10", 11, 0, False, False, "", false, false},
	}
	for _, tt := range tests {
		c, fault := compileExpression(tt.src, names, indexOf(names))
		if fault != nil {
			t.Errorf("%s: %+v", tt.src, *fault)
			continue
		}
		f := fill(t, names, map[string]any{"npr": tt.x, "choke_npr": tt.y})
		if down, up := c.truth(f, 0), c.truth(f, 2); down != tt.down || up != tt.up {
			t.Errorf("%s at %g, %g: down %v, up %v; want %v, %v", tt.src, tt.x, tt.y, down, up, tt.down, tt.up)
		}
		subject := ""
		if c.subject >= 0 {
			subject = names[c.subject].Name
		}
		if subject != tt.subject || c.orders != tt.hasThreshold || subject != "" && c.falling != tt.rulesByFall {
			t.Errorf("%s: subject %q falling %v orders %v", tt.src, subject, c.falling, c.orders)
		}
	}
}

func TestRefusedExpressions(t *testing.T) {
	names := testNames()
	tests := []struct {
		src     string
		column  int    // of the place that is shown
		message string // part of it
		hint    string // part of it
	}{
		{"", 1, "no expression", "write a condition"},
		{"npr", 1, "gives a number", "compare it"},
		{"npr <", 5, "ends too early", ""},
		{"npr < < 2", 7, "did not expect", ""},
		{"(npr < 2", 8, "ends too early", ""},
		{"choke_marjin_percent < 0", 1, `unknown name "choke_marjin_percent"`, "choke_margin_percent"},
		{"npr > 1 and p_oil < 3", 13, `unknown name "p_oil"`, "channel.p_oil"},
		{"channel.p_oyl < 3", 1, `unknown name "channel.p_oyl"`, "channel.p_oil"},
		{`phase == "idel"`, 10, `phase is never "idel"`, "idle"},
		{`"chocked" == choke_state`, 1, `choke_state is never "chocked"`, "choked"},
		{`phase == "unknown"`, 10, `never "unknown"`, "not known(phase)"},
		{"phase == idle", 10, `unknown name "idle"`, ""},
		{"npr == true", 1, "compares a number with true or false", ""},
		{`npr < "2"`, 7, "takes a number", ""},
		{"npr and lit", 1, "takes true or false", ""},
		{"not npr", 5, "takes true or false", ""},
		{"-lit > 2", 2, "takes a number", ""},
		{"lit ? npr : lit", 13, "takes a number", ""},
		{"npr ? lit : lit", 1, "takes true or false", ""},
		{"known(npr + 1)", 7, "not a name", ""},
		{"known(nrp)", 7, "unknown name", "npr"},
		{"known(npr, npr)", 1, "takes one name", ""},
		{"abs(npr, 2) > 1", 1, "takes one number", ""},
		{"max(npr) > 1", 1, "two numbers or more", ""},
		{"sqrt(npr) > 1", 1, "function sqrt is not allowed", ""},
		{"len(phase) > 1", 1, "function len is not allowed", ""},
		{"phase.x.y()", 1, "construct is not allowed", ""},
		{`phase matches "i.*"`, 1, "operator matches is not allowed", ""},
		{`phase contains "i"`, 1, "operator contains is not allowed", ""},
		{"npr in [1, 2]", 1, "operator in is not allowed", ""},
		{"npr in 1..9", 1, "operator in is not allowed", ""},
		{"npr ** 2 > 1", 1, "operator ** is not allowed", ""},
		{"npr % 2 > 1", 1, "operator % is not allowed", ""},
		{"1 .. 3 == 2", 1, "operator .. is not allowed", ""},
		{"any([1, 2], # > npr)", 1, "function any is not allowed", ""},
		{"count(1..1000000, true) > 1", 1, "function count is not allowed", ""},
		{"let x = npr; x > 1", 5, "not allowed", ""},
		{"npr > 1; true", 1, "not allowed", ""},
		{"npr | abs() > 1", 7, "pipe", "abs(x)"},
		{"if lit { true } else { false }", 4, "if is not allowed", ""},
		{"lit ?? true", 1, "operator ?? is not allowed", ""},
		{"nil == nil", 1, "not allowed", ""},
		{"channel[0] > 1", 1, "not a name", ""},
		{"channel?.p_oil > 1", 1, "not allowed", ""},
		{"{npr: 1}", 1, "not allowed", ""},
		{"[npr]", 1, "not allowed", ""},
		{"env > 1", 1, `unknown name "env"`, ""},
		{"lit and\n  nrp > 1", 11, `unknown name "nrp"`, "npr"},
		{`phase == "éé" and nrp > 1`, 10, "never", ""},
		{strings.Repeat("(", 1001) + "lit" + strings.Repeat(")", 1001), 2001, "longer than 2000 bytes", "split"},
	}
	for _, tt := range tests {
		src := tt.src
		if len(src) > 60 {
			src = src[:60] + "…"
		}
		_, fault := compileExpression(tt.src, names, indexOf(names))
		switch {
		case fault == nil:
			t.Errorf("%s: taken", src)
		case !strings.Contains(fault.message, tt.message), !strings.Contains(fault.hint, tt.hint), fault.offset != tt.column-1:
			t.Errorf("%s: at %d %q, hint %q", src, fault.offset+1, fault.message, fault.hint)
		}
	}
}

func TestPosition(t *testing.T) {
	line, column := Position("lit and\n  é nrp > 1", 13)
	if line != 2 || column != 5 {
		t.Errorf("got %d:%d, want 2:5", line, column)
	}
}

func FuzzExpression(f *testing.F) {
	names := testNames()
	for _, src := range []string{
		"npr < 2", `choke_armed and choke_state == "choked"`, "known(npr) ? npr : 2 > 1", "min(1, -npr, channel.p_oil / 0) >= 1e3",
		"egt_indicated_k > 700 degC and npr < 5 %", "channel.p_oil - 3kPa/2 < 30 kPa / 4 or '5 kPa' == phase", "5 µm 3 °C .5e3 ℃/s",
		"not (lit or !lit)", "any(1..9, # > 2)", "let x = 1; x", "a?.b[1:2]", "\"\\u00e9\" == phase", "0x1F_F > .5", "{", "1e999 > npr", "b'xx'",
	} {
		f.Add(src, 1.5)
	}
	ix := indexOf(names)
	f.Fuzz(func(t *testing.T, src string, v float64) {
		c, fault := compileExpression(src, names, ix)
		if fault != nil {
			if fault.offset < 0 || fault.offset > len(src) || fault.message == "" || fault.hint == "" {
				t.Fatalf("%q: fault %+v", src, *fault)
			}
			return
		}
		frame := NewFrame(names)
		for _, x := range []float64{v, -v, 0, math.NaN(), math.Inf(1)} {
			for i := range frame.Numbers {
				frame.Numbers[i] = x
			}
			if got := c.truth(&frame, 0); got < False || got > True {
				t.Fatalf("%q: %d", src, got)
			}
		}
	})
}
