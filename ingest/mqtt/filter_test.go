package mqtt

import (
	"errors"
	"strings"
	"testing"
)

func TestCheckFilter(t *testing.T) {
	tests := []struct {
		name, filter string
		ok           bool
	}{
		// [MQTT-4.7.1-2] and [MQTT-4.7.1-3] with the examples beside them.
		{"multi-level", "sport/tennis/player1/#", true},
		{"multi-level alone", "#", true},
		{"multi-level within a level", "sport/tennis#", false},
		{"multi-level not last", "sport/tennis/#/ranking", false},
		{"single-level alone", "+", true},
		{"single and multi-level", "+/tennis/#", true},
		{"single-level within a level", "sport+", false},
		{"single-level between", "sport/+/player1", true},
		{"first level empty", "/finance", true},
		// [MQTT-4.7.3]
		{"empty", "", false},
		{"NUL", "a\x00b", false},
		{"too long", strings.Repeat("a", 65536), false},
		{"longest", strings.Repeat("a", 65535), true},
		{"not UTF-8", "a/\xff", false},
		{"beyond ASCII", "rigs/Prüfstand-2/Δp", true},
		// White space and DEL disconnect the publisher on the embedded broker.
		{"space", "rigs/rig 1/senml", false},
		{"tab", "rigs/\t", false},
		{"DEL", "rigs/\x7f", false},
		{"no-break space", "rigs/a\u00a0b", false},
		{"byte order mark", "\ufeffrigs", false},
		// Shared subscriptions split a channel over their members.
		{"shared", "$share/group/rigs/#", false},
		{"broker's own", "$SYS/#", false},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			err := CheckFilter(tt.filter)
			if (err == nil) != tt.ok || err != nil && !errors.Is(err, ErrConfig) {
				t.Errorf("CheckFilter = %v, want ok = %t", err, tt.ok)
			}
		})
	}
	for _, topic := range []string{"a/+", "a/#", "", "a b", "$a"} {
		if err := CheckTopic(topic); !errors.Is(err, ErrConfig) {
			t.Errorf("CheckTopic(%q) = %v, want ErrConfig", topic, err)
		}
	}
	if err := CheckTopic("rigs/r1/status"); err != nil {
		t.Error(err)
	}
}

func TestCheckFilters(t *testing.T) {
	tests := []struct {
		name    string
		filters []string
		want    string // part of the error; empty: none
	}{
		{"apart", []string{"rigs/r1/senml", "rigs/r1/lines", "rigs/r1/channels/+"}, ""},
		{"two rigs", []string{"rigs/r1/#", "rigs/r2/#"}, ""},
		{"none", nil, "no topic filter"},
		{"twice", []string{"a", "a"}, "overlap"},
		{"one within the other", []string{"rigs/+/senml", "rigs/r1/#"}, "overlap"},
		{"takes in the probes", []string{"#"}, "probe"},
		{"takes in the probes by levels", []string{"throatwatch/+/+/+"}, "probe"},
		{"bad one", []string{"a", "b#"}, "b#"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			err := CheckFilters(tt.filters)
			if tt.want == "" && err != nil || tt.want != "" && (!errors.Is(err, ErrConfig) || !strings.Contains(err.Error(), tt.want)) {
				t.Errorf("CheckFilters = %v, want %q", err, tt.want)
			}
		})
	}
}

// matches is the definition of a match, level by level [MQTT-4.7.1].
func matches(filter, topic []string) bool {
	switch {
	case len(filter) > 0 && filter[0] == "#":
		return true
	case len(filter) == 0 || len(topic) == 0:
		return len(filter) == len(topic)
	default:
		return (filter[0] == "+" || filter[0] == topic[0]) && matches(filter[1:], topic[1:])
	}
}

// words gives every list of 1 to n levels.
func words(n int, levels ...string) [][]string {
	if n == 0 {
		return nil
	}
	var out [][]string
	for _, l := range levels {
		out = append(out, []string{l})
		for _, rest := range words(n-1, levels...) {
			out = append(out, append([]string{l}, rest...))
		}
	}
	return out
}

// TestOverlapIsExact compares overlap with its definition, some topic matches
// both, over every pair of filters of up to three levels.
func TestOverlapIsExact(t *testing.T) {
	var filters [][]string
	for _, f := range words(3, "a", "b", "", "+", "#") {
		if i := strings.Index(strings.Join(f, "/"), "#"); i < 0 || i == len(strings.Join(f, "/"))-1 {
			if CheckFilter(strings.Join(f, "/")) == nil {
				filters = append(filters, f)
			}
		}
	}
	topics := words(4, "a", "b", "")
	n := 0
	for _, a := range filters {
		for _, b := range filters {
			want := false
			for _, topic := range topics {
				if matches(a, topic) && matches(b, topic) {
					want = true
					break
				}
			}
			if got := overlap(strings.Join(a, "/"), strings.Join(b, "/")); got != want {
				t.Fatalf("overlap(%q, %q) = %t, want %t", a, b, got, want)
			}
			n++
		}
	}
	if n < 10000 {
		t.Errorf("only %d pairs compared", n)
	}
}

func FuzzCheckFilter(f *testing.F) {
	for _, s := range []string{"rigs/r1/senml", "a/+/#", "#", "/", "//", "+", "a\x00", "\xff", "$x", strings.Repeat("/", 100)} {
		f.Add(s, "rigs/+/senml")
	}
	f.Fuzz(func(t *testing.T, a, b string) {
		if CheckFilter(a) != nil || CheckFilter(b) != nil {
			return
		}
		if overlap(a, b) != overlap(b, a) {
			t.Errorf("overlap of %q and %q depends on the order", a, b)
		}
		if !overlap(a, a) {
			t.Errorf("%q does not overlap itself", a)
		}
		if CheckTopic(a) == nil && overlap(a, b) != matches(strings.Split(b, "/"), strings.Split(a, "/")) {
			t.Errorf("topic %q, filter %q: overlap is not match", a, b)
		}
	})
}

func FuzzAnswer(f *testing.F) {
	for _, s := range []string{"1 1000", "", " ", "-1 1", "1", "1 x", "99999999999999999999 1", "2 -5"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, payload []byte) {
		s := newSession(&Client{}, 0, "", "")
		s.answer(payload)
		if n := s.echoed.Load(); n != 0 && !strings.Contains(string(payload), " ") {
			t.Errorf("%q counts as probe %d", payload, n)
		}
	})
}
