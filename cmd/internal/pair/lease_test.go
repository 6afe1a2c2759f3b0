package pair

import (
	"slices"
	"testing"
	"time"

	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// bench plays watches and a broker of one topic, by a clock of its own.
type bench struct {
	t       *testing.T
	now     time.Time
	watches []*player
	kept    *beat // retained
}

// player is a watch with the part of the broker that it reaches.
type player struct {
	*lease
	part    int  // watches of other parts are not heard, as in a cluster that is broken
	cut     bool // it reaches no broker
	stopped bool // the process does not run; the broker keeps what comes for it
	waits   []beat
}

func newBench(t *testing.T, names ...string) *bench {
	t.Helper()
	b := &bench{t: t, now: time.Unix(1_700_000_000, 0)}
	for _, n := range names {
		b.watches = append(b.watches, &player{lease: newLease(n, "life of "+n)})
	}
	return b
}

// run lets time pass, and fails if two that hear each other speak for longer than 2 s.
func (b *bench) run(d time.Duration) {
	b.t.Helper()
	both := time.Duration(0)
	for end := b.now.Add(d); b.now.Before(end); b.now = b.now.Add(tickEvery) {
		for _, w := range b.watches {
			if w.stopped {
				continue
			}
			if m, due := w.tick(b.now, b.now.UnixNano(), 0); due && !w.cut {
				b.publish(w, m)
			}
		}
		if len(b.speaking()) > 1 && b.watches[0].part == b.watches[1].part {
			both += tickEvery
		} else {
			both = 0
		}
		if both > 2*time.Second {
			b.t.Fatalf("%v speak for more than 2 s", b.speaking())
		}
	}
}

func (b *bench) publish(from *player, m beat) {
	if m.Speaks {
		b.kept = &m
	}
	for _, w := range b.watches {
		switch {
		case w.cut || w.part != from.part:
		case w.stopped:
			w.waits = append(w.waits, m)
		default:
			w.hear(&m, false, b.now)
		}
	}
}

// wakes lets a process that was stopped go on: what the broker kept for it comes first.
func (b *bench) wakes(w *player) {
	w.stopped = false
	for i := range w.waits {
		w.hear(&w.waits[i], false, b.now)
	}
	w.waits = nil
}

// speaking gives the watches that speak now.
func (b *bench) speaking() (names []string) {
	for _, w := range b.watches {
		if w.Speaks(b.now) {
			names = append(names, w.name)
		}
	}
	return names
}

func (b *bench) want(what string, names ...string) {
	b.t.Helper()
	if got := b.speaking(); !slices.Equal(got, names) {
		b.t.Errorf("%s: %v speak, want %v", what, got, names)
	}
}

// Times are those of the design: a lease renewed each second, taken after 3 s, one of two
// that speak yields within 2 s.
func TestLease(t *testing.T) {
	t.Run("two that begin at once", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.run(2 * time.Second)
		b.want("before 3 s have passed")
		b.run(4 * time.Second)
		if len(b.speaking()) != 1 {
			t.Errorf("%v speak", b.speaking())
		}
	})
	t.Run("one is killed", func(t *testing.T) {
		b := newBench(t, "alpha")
		b.run(5 * time.Second)
		b.watches = append(b.watches, &player{lease: newLease("beta", "life of beta")})
		b.run(10 * time.Second)
		b.want("the first goes on", "alpha")
		if st := b.watches[1].Standing(b.now); st.Name != "alpha" || st.Other != "alpha" || st.Speaks || st.Why != "" {
			t.Errorf("beta stands %+v", st)
		}
		b.watches[0].stopped = true
		b.run(1800 * time.Millisecond)
		if b.watches[1].Speaks(b.now) {
			t.Error("beta speaks less than 3 s after the last beat")
		}
		b.run(2400 * time.Millisecond)
		b.want("4.2 s after the kill", "beta")
	})
	t.Run("an orderly end", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.run(10 * time.Second)
		first := slices.IndexFunc(b.watches, func(w *player) bool { return w.Speaks(b.now) })
		gone := b.watches[first].farewell(b.now.UnixNano())
		b.watches[first].stopped = true
		other := b.watches[1-first]
		other.hear(&gone, false, b.now)
		b.run(tickEvery)
		if !other.Speaks(b.now) {
			t.Error("the other does not speak at once")
		}
	})
	t.Run("a process is stopped and goes on", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.run(10 * time.Second)
		first := slices.IndexFunc(b.watches, func(w *player) bool { return w.Speaks(b.now) })
		one, other := b.watches[first], b.watches[1-first]
		one.stopped = true
		b.run(8 * time.Second)
		b.want("while it is stopped", other.name)
		if one.Speaks(b.now) {
			t.Error("by its own clock it still speaks")
		}
		b.wakes(one)
		b.want("as it goes on", other.name)
		b.run(20 * time.Second)
		b.want("long after", other.name)
	})
	t.Run("one loses its broker", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.run(10 * time.Second)
		first := slices.IndexFunc(b.watches, func(w *player) bool { return w.Speaks(b.now) })
		one, other := b.watches[first], b.watches[1-first]
		one.cut = true
		b.run(5 * time.Second)
		b.want("one is cut off", other.name)
		if st := one.Standing(b.now); st.Speaks || st.Name != "" || st.Why == "" {
			t.Errorf("the one without a broker stands %+v", st)
		}
		one.cut = false
		one.hear(b.kept, true, b.now) // the first that comes after it has subscribed again
		b.run(20 * time.Second)
		b.want("it is back", other.name)
	})
	t.Run("a broken cluster heals", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.run(10 * time.Second)
		b.watches[1].part = 1
		b.run(10 * time.Second)
		b.want("each at its part", "alpha", "beta")
		b.watches[1].part = 0
		b.run(2 * time.Second)
		if n := len(b.speaking()); n != 1 {
			t.Errorf("%d speak 2 s after it has healed", n)
		}
	})
	t.Run("of equal epochs the lower name yields", func(t *testing.T) {
		b := newBench(t, "alpha", "beta")
		b.watches[1].part = 1
		b.run(6 * time.Second)
		b.want("each at its part", "alpha", "beta")
		b.watches[1].part = 0
		b.run(2 * time.Second)
		b.want("healed", "beta")
	})
	t.Run("what was said before is not heard again", func(t *testing.T) {
		b := newBench(t, "beta")
		l := b.watches[0]
		old := beat{Name: "alpha", Life: "x", Renewed: 5, Epoch: 3, Speaks: true}
		for range 40 {
			b.run(tickEvery)
			l.hear(&old, false, b.now)
		}
		b.want("alpha's one beat said again and again", "beta")
	})
	t.Run("two of one name", func(t *testing.T) {
		b := newBench(t, "alpha", "alpha")
		b.watches[1].life = "another life"
		b.watches[1].mine.Life = b.watches[1].life
		b.run(10 * time.Second)
		if len(b.speaking()) != 1 {
			t.Errorf("%v speak", b.speaking())
		}
	})
}

// An alarm of the other watch is found here by its id, or by its rule and time.
func TestLocalize(t *testing.T) {
	s := rules.State{Instances: []rules.Instance{{Rule: "unchoke", ID: "run-1/unchoke/20000000000", Raised: 20e9, Revision: 7}}}
	for _, tt := range []struct {
		name, alarm string
		alike       bool
		want        string
		ok          bool
	}{
		{"the same", "run-1/unchoke/20000000000", false, "run-1/unchoke/20000000000", true},
		{"raised a little apart", "run-1/unchoke/23000000000", true, "run-1/unchoke/20000000000", true},
		{"raised a little apart, not yet", "run-1/unchoke/23000000000", false, "", false},
		{"raised well apart", "run-1/unchoke/33000000000", true, "", false},
		{"by its rule", "unchoke", false, "unchoke", true},
		{"another rule", "run-1/egt_lost/20000000000", true, "", false},
		{"no id", "/x/", true, "", false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			a := pipeline.Action{Alarm: tt.alarm, Revision: 3}
			ok := localize(&a, &s, tt.alike)
			if ok != tt.ok || ok && (a.Alarm != tt.want || a.Revision != 7) || !ok && a.Alarm != tt.alarm {
				t.Errorf("localize = %v, %+v", ok, a)
			}
		})
	}
}

// Only who has the secret can say something, and on one topic only what was said there.
func TestSigned(t *testing.T) {
	secret := []byte("a secret of a test, 16+")
	text, err := sign(secret, "rigs/a/speaking", beat{Name: "alpha", Renewed: 7})
	if err != nil {
		t.Fatal(err)
	}
	var got beat
	if err := open(secret, "rigs/a/speaking", text, &got); err != nil || got.Name != "alpha" || got.Renewed != 7 {
		t.Errorf("open = %v, %+v", err, got)
	}
	changed := slices.Clone(text)
	changed[slices.Index(changed, '7')] = '8'
	for name, err := range map[string]error{
		"another secret": open([]byte("another of a test, 16+"), "rigs/a/speaking", text, &got),
		"another topic":  open(secret, "rigs/b/speaking", text, &got),
		"changed":        open(secret, "rigs/a/speaking", changed, &got),
		"nothing":        open(secret, "rigs/a/speaking", nil, &got),
		"too large":      open(secret, "rigs/a/speaking", make([]byte, mostMessage+1), &got),
	} {
		if err == nil {
			t.Errorf("%s: it is believed", name)
		}
	}
	now := time.Unix(1_700_000_000, 0)
	for d, want := range map[time.Duration]bool{0: true, -59 * time.Second: true, 59 * time.Second: true, -61 * time.Second: false, 61 * time.Second: false} {
		if isFresh(now.Add(d).UnixNano(), now) != want {
			t.Errorf("sent %v apart: fresh is %v", d, !want)
		}
	}
}

// FuzzOpen: whatever comes, nothing is believed that was not signed.
func FuzzOpen(f *testing.F) {
	f.Add([]byte(`{"mac":"00","says":{"name":"alpha"}}`))
	f.Add([]byte(`{"mac":"","says":null}`))
	f.Add([]byte(`{`))
	f.Fuzz(func(t *testing.T, payload []byte) {
		var v told
		if open([]byte("a secret that no input has in it"), "rigs/a/actions", payload, &v) == nil {
			t.Errorf("%q is believed", payload)
		}
	})
}
