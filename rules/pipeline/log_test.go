package pipeline

import (
	"encoding/json"
	"errors"
	"fmt"
	"reflect"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/rules"
)

// Everything that a person does is an entry of the log, with who, when and why; what
// is refused is none, and what is asked for twice is one.
func TestLog(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 10*second)
	if err := b.act(Action{Do: DoRunStart, By: "A. Alder"}); err != nil {
		t.Fatal(err)
	}
	b.record(ingest.KindHealth, `{"part":"input_path","ok":false}`)
	b.play(atRest, 10*second)
	b.told(OutcomeLog)
	channels := len(b.m.prog.cfg.Compute.Channels)
	who := func(a Action) Action {
		if a.By == "" {
			a.By, a.Role = "A. Alder", "operator"
		}
		return a
	}
	engineer := func(a Action) Action { a.By, a.Role = "C. Cedar", "engineer"; return a }
	long := strings.Repeat("x", mostText+1)
	known := func(v float64) rules.Reading { return rules.Reading{V: v, Known: true} }
	tests := []struct {
		name string
		do   Action
		want string // the entry as JSON without t, alarm, by and role; "" = refused
		err  error
	}{
		{"mark", Action{Do: DoMark, Text: "bleed open"}, `{"what":"mark","text":"bleed open"}`, nil},
		{"mark too long", Action{Do: DoMark, Text: long}, "", ErrInvalid},
		{"reading", Action{Do: DoEntry, Name: " oil level", Value: known(4.2), Unit: "l"}, `{"what":"entry","name":"oil level","value":4.2,"unit":"l"}`, nil},
		{"reading in another unit", Action{Do: DoEntry, Name: " oil level", Value: known(42), Unit: " mm "}, `{"what":"entry","name":"oil level","value":42,"unit":"mm"}`, nil},
		{"reading of zero", Action{Do: DoEntry, Name: "leaks", Value: known(0), Text: "walk-round"}, `{"what":"entry","name":"leaks","value":0,"text":"walk-round"}`, nil},
		{"remark", Action{Do: DoEntry, Name: "fuel lot", Text: "J-17"}, `{"what":"entry","name":"fuel lot","text":"J-17"}`, nil},
		{"no name", Action{Do: DoEntry, Value: known(1)}, "", ErrInvalid},
		{"neither value nor text", Action{Do: DoEntry, Name: "oil level"}, "", ErrInvalid},
		{"unit alone", Action{Do: DoEntry, Name: "oil level", Unit: "mm", Text: "none"}, "", ErrInvalid},
		{"unknown unit", Action{Do: DoEntry, Name: "oil level", Value: known(1), Unit: "furlong"}, "", ErrInvalid},
		{"name too long", Action{Do: DoEntry, Name: long[:mostName+1], Value: known(1)}, "", ErrInvalid},
		{"swap", engineer(Action{Do: DoSwap, Channel: "egt", Serial: "TC-0417", Reason: "open"}), `{"what":"swap","channel":"egt","reason":"open","serial":"TC-0417","valid_from":"NOW"}`, nil},
		{"swap by an operator", Action{Do: DoSwap, Channel: "egt", Serial: "TC-0417", Reason: "open"}, "", rules.ErrRefused},
		{"swap of no channel", engineer(Action{Do: DoSwap, Channel: "egt_9", Serial: "TC-0417", Reason: "open"}), "", ErrNoChannel},
		{"swap without a serial", engineer(Action{Do: DoSwap, Channel: "egt", Reason: "open"}), "", ErrInvalid},
		{"swap without a reason", engineer(Action{Do: DoSwap, Channel: "egt", Serial: "TC-0417"}), "", ErrInvalid},
		{"swap before the run", engineer(Action{Do: DoSwap, Channel: "egt", Serial: "1", Reason: "x", ValidFrom: rules.Time(b.s.Run.Started - 1)}), "", ErrInvalid},
		{"swap yet to come", engineer(Action{Do: DoSwap, Channel: "egt", Serial: "1", Reason: "x", ValidFrom: rules.Time(b.s.Host + 2*second)}), "", ErrInvalid},
		{"acknowledge", Action{Do: rules.DoAcknowledge, Alarm: "deaf", Reason: "seen"}, `{"what":"acknowledge","rule":"deaf","text":"deaf","reason":"seen"}`, nil},
		{"acknowledge again", Action{Do: rules.DoAcknowledge, Alarm: "deaf"}, "", rules.ErrRefused},
		{"shelve", Action{Do: rules.DoShelve, Alarm: "clock", Reason: "time server moves", Seconds: 600}, `{"what":"shelve","rule":"clock","text":"clock, for 10m0s","reason":"time server moves"}`, nil},
		{"shelve a warning", Action{Do: rules.DoShelve, Alarm: "deaf", Reason: "loud", Seconds: 600}, "", rules.ErrRefused},
		{"unshelve", Action{Do: rules.DoUnshelve, Alarm: "clock"}, `{"what":"unshelve","rule":"clock","text":"clock"}`, nil},
		{"out of service by an operator", Action{Do: "out-of-service", Alarm: "clock", Reason: "x"}, "", rules.ErrRefused},
		{"out of service", engineer(Action{Do: "out-of-service", Alarm: "clock", Reason: "x"}), `{"what":"out_of_service","rule":"clock","text":"clock","reason":"x"}`, nil},
		{"in service", engineer(Action{Do: rules.DoInService, Alarm: "clock", Reason: "y"}), `{"what":"in_service","rule":"clock","text":"clock","reason":"y"}`, nil},
	}
	entries := 0
	for i, tt := range tests {
		a := who(tt.do)
		a.RequestID = fmt.Sprint("r", i)
		for k := range b.s.Rules.Instances {
			if b.s.Rules.Instances[k].Rule == a.Alarm {
				a.Revision = b.s.Rules.Instances[k].Revision
			}
		}
		at := b.r.Host
		err := b.act(a)
		if !errors.Is(err, tt.err) || (tt.want == "") != (tt.err != nil) {
			t.Errorf("%s: %v, want %v", tt.name, err, tt.err)
		}
		if err == nil { // the same request again is done once
			err = b.act(a)
		}
		told := b.told(OutcomeLog)
		if tt.want == "" {
			if told != "" {
				t.Errorf("%s: refused, and told %q", tt.name, told)
			}
			continue
		}
		entries++
		if err != nil || told != strings.ReplaceAll(a.Do, "-", "_")+" by "+a.By {
			t.Errorf("%s: told %q, %v", tt.name, told, err)
			continue
		}
		last := b.s.Log[len(b.s.Log)-1]
		if int64(last.T) != at || last.By != a.By || last.Role != a.Role || (last.Rule != "") != strings.Contains(last.Alarm, "/"+last.Rule+"/") {
			t.Errorf("%s: %+v", tt.name, last)
		}
		text, err := json.Marshal(last)
		if err != nil {
			t.Fatal(err)
		}
		var got, want map[string]any
		if err := errors.Join(json.Unmarshal(text, &got), json.Unmarshal([]byte(strings.Replace(tt.want, "NOW", rfc3339(last.ValidFrom), 1)), &want)); err != nil {
			t.Fatal(err)
		}
		for _, key := range []string{"t", "by", "role"} {
			delete(got, key)
		}
		delete(got, "alarm")
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s: entry %v, want %v", tt.name, got, want)
		}
		var back Entry
		if err := json.Unmarshal(text, &back); err != nil || back != last {
			t.Errorf("%s: comes back as %+v: %v", tt.name, back, err)
		}
	}
	if len(b.s.Log) != entries {
		t.Errorf("%d entries, want %d", len(b.s.Log), entries)
	}
	if len(b.s.Swaps) != 1 || b.s.Swaps[0].Channel != "egt" || b.s.Swaps[0].Serial != "TC-0417" || b.s.Swaps[0].At-b.s.Swaps[0].ValidFrom > second || b.s.Swaps[0].By != "C. Cedar" {
		t.Errorf("swaps %+v", b.s.Swaps)
	}
	if len(b.m.prog.cfg.Compute.Channels) != channels {
		t.Error("a swap has changed the channels")
	}

	// Log and swaps outlive a restart.
	text, err := b.s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	if again, err := Decode(text); err != nil || !reflect.DeepEqual(again.Log, b.s.Log) || !reflect.DeepEqual(again.Swaps, b.s.Swaps) {
		t.Errorf("after a restart %+v, %+v: %v", again.Log, again.Swaps, err)
	}

	// Between runs a swap is valid from the end of the last one on.
	if err := b.act(Action{Do: DoRunEnd, By: "A. Alder"}); err != nil {
		t.Fatal(err)
	}
	b.play(atRest, 3*second)
	ended := b.s.Run.Ended
	swap := engineer(Action{Do: DoSwap, Channel: "p7", Serial: "PT-9", Reason: "drifts", ValidFrom: rules.Time(ended - 1)})
	if err := b.act(swap); !errors.Is(err, ErrInvalid) {
		t.Errorf("a swap before the end of the last run: %v", err)
	}
	swap.ValidFrom = rules.Time(ended)
	if err := b.act(swap); err != nil || b.s.Swaps[len(b.s.Swaps)-1].ValidFrom != ended {
		t.Errorf("a swap between runs: %v", err)
	}

	// What the state holds is bounded; the newest stay.
	for i := range swapsKept + logKept {
		swap.Serial = fmt.Sprint("PT-", i)
		if err := b.act(swap); err != nil {
			t.Fatal(err)
		}
	}
	last := fmt.Sprint("PT-", swapsKept+logKept-1)
	if len(b.s.Log) != logKept || len(b.s.Swaps) != swapsKept || b.s.Log[logKept-1].Serial != last || b.s.Swaps[swapsKept-1].Serial != last {
		t.Errorf("%d entries, %d swaps", len(b.s.Log), len(b.s.Swaps))
	}
}

func rfc3339(t rules.Time) string {
	text, err := t.MarshalJSON()
	if err != nil {
		panic(err)
	}
	return strings.Trim(string(text), `"`)
}
