package pipeline

import (
	"testing"

	"throatwatch/ingest"
)

// A record of a run file that somebody sent may hold anything: whatever it is, a step
// ends, and the state that it leaves can be stored and read.
func FuzzRecord(f *testing.F) {
	b := newBed(f)
	b.play(running, second)
	state, err := b.s.Encode(false)
	if err != nil {
		f.Fatal(err)
	}
	for _, seed := range []struct {
		kind    ingest.Kind
		payload string
	}{
		{ingest.KindBoot, `{"epoch":2,"build":"b","goarch":"amd64"}`},
		{ingest.KindConfig, "rig two"},
		{ingest.KindMessage, `[{"n":"p7","v":230000,"bt":1764579601}]`},
		{ingest.KindAction, `{"do":"acknowledge","alarm":"x","revision":1,"by":"Edda Marsh","request_id":"1"}`},
		{ingest.KindAction, `{"do":"shelve","alarm":"x","for":600000000000,"reason":"known"}`},
		{ingest.KindAction, `{"do":"mark","text":"here"}`},
		{ingest.KindAction, `{"do":"swap","channel":"p7","serial":"2","uncertainty":{}}`},
		{ingest.KindClock, `{"by":-9223372036854775808}`},
		{ingest.KindHealth, `{"part":"disk","ok":false,"behind":1e308}`},
		{ingest.KindGap, `{"lost":18446744073709551615}`},
	} {
		f.Add(uint8(seed.kind), topic, []byte(seed.payload), second)
	}
	f.Fuzz(func(t *testing.T, kind uint8, topic string, payload []byte, later int64) {
		s, err := Decode(state)
		if err != nil {
			t.Fatal(err)
		}
		m := NewMachine(parser(t))
		r := ingest.Record{Seq: s.Seq + 1, Host: s.Host + max(0, min(later, 100*second)), Kind: ingest.Kind(kind), Topic: topic, Payload: payload}
		if r.Kind == ingest.KindInvalid || r.Kind > ingest.KindGap {
			return // the reader of records refuses it
		}
		m.Step(s, &r)
		r = ingest.Record{Seq: r.Seq + 1, Host: r.Host + second, Kind: ingest.KindTick}
		m.Step(s, &r)
		text, err := s.Encode(false)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := Decode(text); err != nil {
			t.Error(err)
		}
	})
}
