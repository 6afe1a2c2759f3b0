package ingest_test

import (
	"bytes"
	"errors"
	"testing"

	"throatwatch/ingest"
)

// Whatever the bytes are, what is read of them is a list of records in order that is
// written to the same records again, and a fault is ErrRecord.
func FuzzRecords(f *testing.F) {
	list := []ingest.Record{
		{Kind: ingest.KindBoot, Host: 1764579600e9, Payload: []byte(`{"epoch":1}`)},
		{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Host: 1764579601e9, Topic: "rigs/x/senml", Payload: []byte("[]")},
		{Kind: ingest.KindMessage, Flags: ingest.FlagRetained, Host: 1764579601e9, Topic: "rigs/x/senml"},
		{Kind: ingest.KindTick, Host: 1764579602e9},
	}
	text := ingest.AppendRecords(nil, list)
	f.Add(text)
	f.Add(text[:len(text)-1])
	f.Add([]byte{3, 0, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 1, 0, 0}) // host time before 1970
	f.Fuzz(func(t *testing.T, text []byte) {
		got, err := ingest.DecodeRecords(nil, 7, text)
		if err != nil && !errors.Is(err, ingest.ErrRecord) {
			t.Error(err)
		}
		for i := range got {
			if got[i].Seq != 7+uint64(i) || got[i].Host < 0 || i > 0 && got[i].Host < got[i-1].Host {
				t.Fatalf("record %d: %+v", i, got[i])
			}
		}
		again, err := ingest.DecodeRecords(nil, 7, ingest.AppendRecords(nil, got))
		if err != nil || len(again) != len(got) {
			t.Fatalf("%d records became %d: %v", len(got), len(again), err)
		}
		for i := range got {
			a, b := &got[i], &again[i]
			if a.Kind != b.Kind || a.Flags != b.Flags || a.Host != b.Host || a.Topic != b.Topic || !bytes.Equal(a.Payload, b.Payload) {
				t.Fatalf("record %d: %+v became %+v", i, a, b)
			}
		}
	})
}
