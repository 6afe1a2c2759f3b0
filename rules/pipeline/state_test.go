package pipeline

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"reflect"
	"slices"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/rules"
)

// Encode and Decode are inverse, with and without the window of copies.
func TestEncode(t *testing.T) {
	b := newBed(t)
	b.play(atRest, second)
	b.play(turning, 2*second)
	hot := running
	hot.egt = 1000
	b.play(hot, 2*second)
	if err := b.act(Action{Do: DoMark, RequestID: "r1"}); err != nil {
		t.Fatal(err)
	}
	for _, full := range []bool{true, false} {
		text, err := b.s.Encode(full)
		if err != nil {
			t.Fatal(err)
		}
		got, err := Decode(text)
		if err != nil {
			t.Fatal(err)
		}
		again, err := got.Encode(full)
		if !full { // nothing came since
			text, _ = b.s.Encode(full)
		}
		if err != nil || !bytes.Equal(again, text) {
			t.Errorf("full %v: what was decoded encodes to other bytes: %v", full, err)
		}
		want := uint64(0)
		if full {
			want = b.s.window.n
		}
		if got.window.n != want {
			t.Errorf("full %v: %d hashes of copies, want %d", full, got.window.n, want)
		}
		if got.Run != b.s.Run || !slices.Equal(got.Done, b.s.Done) || !reflect.DeepEqual(got.Align, b.s.Align) || !reflect.DeepEqual(got.Rules, b.s.Rules) {
			t.Errorf("full %v: the state differs", full)
		}
		// Cut anywhere it is an error, or, in the window, a shorter window.
		size := 8 + int(binary.LittleEndian.Uint64(text))
		for n := range size {
			if n%7 == 0 || n > size-20 {
				if _, err := Decode(text[:n]); err == nil {
					t.Fatalf("full %v: %d of %d bytes are a state", full, n, size)
				}
			}
		}
	}
	if _, err := Decode(nil); err == nil {
		t.Error("nothing is a state")
	}
}

// No bytes make Decode panic.
func FuzzDecode(f *testing.F) {
	b := newBed(f)
	b.play(running, second)
	text, err := b.s.Encode(false)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(text)
	f.Add(text[:len(text)/2])
	f.Add([]byte{255, 255, 255, 255, 255, 255, 255, 255, 0})
	f.Fuzz(func(t *testing.T, text []byte) {
		s, err := Decode(text)
		if (s == nil) == (err == nil) {
			t.Errorf("state %v, error %v", s != nil, err)
		}
	})
}

// The window against a plain list of the last 200 000 hashes.
func TestWindow(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	var w Window
	var list []uint64
	count := map[uint64]int{} // of the list
	for i := range 3 * windowSize {
		// Mostly new ones; some that are far behind, some just beyond the window.
		h := uint64(i) | 1<<40
		switch rng.IntN(10) {
		case 0:
			h = uint64(rng.IntN(1000))
		case 1:
			if len(list) > 0 {
				h = list[max(0, len(list)-1-rng.IntN(windowSize+2000))]
			}
		}
		if got, want := w.push(h), count[h] > 0; got != want {
			t.Fatalf("push %d: seen %v, want %v", i, got, want)
		}
		list = append(list, h)
		count[h]++
		if n := len(list) - windowSize; n > 0 {
			if count[list[n-1]]--; count[list[n-1]] == 0 {
				delete(count, list[n-1])
			}
		}
	}
	if len(w.last) != len(count) || len(w.ring) != windowSize {
		t.Errorf("%d hashes are known, want %d", len(w.last), len(count))
	}
	var again Window
	again.load(wholeWindow(w.append(nil, 0)))
	if !reflect.DeepEqual(w.last, again.reckon(w.n)) || !bytes.Equal(w.append(nil, 0), again.append(nil, 0)) {
		t.Error("a window that was written and read differs")
	}
	// A part holds what came since, but never more than a window.
	for _, n := range []uint64{0, 1, windowSize, windowSize + 5} {
		w.kept, w.since = w.n-n, 77
		since, hashes, ok := windowPart(w.appendPart(nil))
		if want := list[len(list)-int(min(n, windowSize)):]; !ok || since != 77 || !slices.Equal(hashes, want) {
			t.Errorf("the part of %d hashes has %d, since record %d: %v", n, len(hashes), since, ok)
		}
	}
	for _, b := range [][]byte{nil, w.append(nil, 0), {partMark}, append([]byte{'q'}, make([]byte, 16)...), make([]byte, 10)} {
		if _, _, ok := windowPart(b); ok {
			t.Errorf("%d bytes are the part of a window", len(b))
		}
	}
	// Topic and payload both count, and where one ends.
	hashes := map[uint64]bool{}
	for _, r := range []ingest.Record{{Topic: "a", Payload: []byte("bc")}, {Topic: "ab", Payload: []byte("c")}, {Topic: "abc"}, {Payload: []byte("abc")}, {Topic: "a", Payload: []byte("bd")}} {
		hashes[messageHash(&r)] = true
	}
	if len(hashes) != 5 {
		t.Errorf("%d hashes of 5 messages", len(hashes))
	}
}

// reckon gives the numbers of the newest pushes as they would be had n hashes been
// pushed.
func (w *Window) reckon(n uint64) map[uint64]uint64 {
	out := make(map[uint64]uint64, len(w.last))
	for h, k := range w.last {
		out[h] = k + n - w.n
	}
	return out
}

// The digest covers operating points and alarms of a run, every bit of them, and
// nothing else.
func TestDigest(t *testing.T) {
	run := func(event string) *Outcome { return &Outcome{Kind: OutcomeRun, Event: event} }
	var point monitor.OperatingPoint
	point.Reset()
	of := func(outs ...*Outcome) string {
		d := NewDigest()
		for _, o := range outs {
			d.Add(o)
		}
		return d.String()
	}
	base := Outcome{Kind: OutcomePoint, Epoch: 1, N: 5, T: epoch, Point: &point}
	plain := of(run("started"), &base)
	// Outside of a run, and of other kinds, nothing counts.
	empty := NewDigest().String()
	if of(&base) != empty || of(run("started"), &base, run("started")) != empty {
		t.Error("an outcome outside of the run is covered")
	}
	for _, kind := range []OutcomeKind{OutcomeChannels, OutcomeLedger, OutcomeStatus, OutcomeMark, OutcomeConfig, OutcomeQuarantine, OutcomeAction} {
		if of(run("started"), &base, &Outcome{Kind: kind}) != plain {
			t.Errorf("kind %d is covered", kind)
		}
	}
	if of(run("started"), &base, run("ended"), &base) != plain {
		t.Error("what comes after the run is covered")
	}
	// Every field of a point changes it.
	seen := map[string]string{plain: "nothing"}
	note := func(name, digest string) {
		if other, ok := seen[digest]; ok {
			t.Errorf("changing %s gives the digest of changing %s", name, other)
		}
		seen[digest] = name
	}
	for q := range monitor.NumQuantities {
		p := point
		p.V[q] = 0
		o := base
		o.Point = &p
		note(q.Info().Name, of(run("started"), &o))
	}
	fields := reflect.TypeFor[monitor.OperatingPoint]()
	for i := range fields.NumField() {
		name := fields.Field(i).Name
		if name == "V" || name == "T" || name == "Scan" { // T is the outcome's, Scan follows from the records
			continue
		}
		p := point
		f := reflect.ValueOf(&p).Elem().Field(i)
		if f.Kind() == reflect.Struct {
			for k := range f.NumField() {
				p = point
				increase(f.Field(k))
				o := base
				o.Point = &p
				note(fmt.Sprint(name, " ", k), of(run("started"), &o))
			}
			continue
		}
		increase(f)
		o := base
		o.Point = &p
		note(name, of(run("started"), &o))
	}
	for name, change := range map[string]func(*Outcome){
		"epoch": func(o *Outcome) { o.Epoch++ }, "n": func(o *Outcome) { o.N++ }, "t": func(o *Outcome) { o.T++ },
		"kind": func(o *Outcome) { o.Kind, o.Alarm = OutcomeAlarm, &rules.Alarm{} },
	} {
		o := base
		change(&o)
		note(name, of(run("started"), &o))
	}
	// Kept and gone on with, it is the same; a state that is cut is refused.
	d := NewDigest()
	d.Add(run("started"))
	d.Add(&base)
	kept, err := d.MarshalBinary()
	if err != nil {
		t.Fatal(err)
	}
	var again Digest
	if err := again.UnmarshalBinary(kept); err != nil {
		t.Fatal(err)
	}
	d.Add(&base)
	again.Add(&base)
	if d.String() != again.String() || d.Count() != 2 || again.Count() != 2 || d.String() == plain {
		t.Errorf("%s of %d and %s of %d", d, d.Count(), &again, again.Count())
	}
	for n := range kept {
		if err := new(Digest).UnmarshalBinary(kept[:n]); err == nil {
			t.Errorf("%d of %d bytes are a digest", n, len(kept))
		}
	}
	// After records that were not stored it begins anew within the run.
	again.Reset()
	again.Add(&base)
	if again.Count() != 1 || again.String() != plain {
		t.Error("after a reset the run is over for the digest")
	}
}

func increase(v reflect.Value) {
	switch {
	case v.Kind() == reflect.Bool:
		v.SetBool(true)
	case v.CanInt():
		v.SetInt(v.Int() + 1)
	default:
		v.SetUint(v.Uint() + 1)
	}
}

// A run file replays to the digest that it had live, from its beginning and from
// any checkpoint, with copies of messages from before the checkpoint known.
func TestReplay(t *testing.T) {
	ctx := t.Context()
	f, err := runfile.Create(ctx, filepath.Join(t.TempDir(), "run.db"), runfile.Header{ID: "x-1", Rig: "x", State: runfile.StateRunning}, runfile.Options{})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := f.Close(); err != nil {
			t.Error(err)
		}
	})
	m, s, live := NewMachine(parser(t)), &State{}, NewDigest()
	var batch []ingest.Record
	var outs []string
	gapped := 0 // outcomes up to the gap
	host := epoch
	take := func(kind ingest.Kind, topic string, payload []byte) {
		r := ingest.Record{Seq: s.Seq + 1, Host: host, Kind: kind, Topic: topic, Payload: payload}
		batch = append(batch, r)
		for _, o := range m.Step(s, &r) {
			live.Add(&o)
			outs = append(outs, fmt.Sprint(o.Kind, o.N, o.T, o.Past))
		}
	}
	commit := func(full bool) {
		state, err := s.Encode(full)
		if err != nil {
			t.Fatal(err)
		}
		digest, err := live.MarshalBinary()
		if err != nil {
			t.Fatal(err)
		}
		err = f.Commit(ctx, runfile.Batch{
			Records: batch, Checkpoint: &runfile.Checkpoint{Seq: s.Seq, Host: s.Host, State: state, Digest: digest, Full: full},
		})
		if err != nil {
			t.Fatal(err)
		}
		batch = nil
	}
	take(ingest.KindBoot, "", []byte(`{"epoch":1}`))
	take(ingest.KindConfig, "", []byte("rig one"))
	commit(true)
	states := []engine{atRest, turning, idling, running, running}
	var sent [][]byte
	var seqs []uint64
	for k := range int64(1000) {
		at := epoch + k*period
		host = at + 3*ms
		e := states[k/200]
		e.oil += float64(k % 7)
		sent = append(sent, e.pack(at))
		take(ingest.KindMessage, topic, sent[k])
		if k > 300 && k%5 == 0 {
			take(ingest.KindMessage, topic, sent[k-290]) // a copy of long ago, before two checkpoints
		}
		if k == 910 {
			// A disk that fails: what was stepped since the last commit is not stored. A gap
			// record stands for it, with the state after it, and the digest begins anew.
			commit(false)
			for i := range int64(40) {
				host = at + 4*ms + i
				take(ingest.KindMessage, topic, e.pack(at+i*ms/10))
			}
			batch = nil
			live.Reset()
			take(ingest.KindGap, "", []byte("{}"))
			commit(true)
			gapped = len(outs)
		}
		if k%140 == 139 {
			commit(k%280 == 279)
			seqs = append(seqs, s.Seq)
			// A checkpoint of the same host time after it, full: not one to begin from.
			take(ingest.KindMessage, topic, e.pack(at+ms))
			commit(true)
			take(ingest.KindTick, "", nil)
			commit(false)
		}
	}
	commit(false)
	want, err := s.Encode(true)
	if err != nil {
		t.Fatal(err)
	}
	if s.Align.Counters[ingest.ReasonDuplicate] < 139 || live.Count() < 80 {
		t.Fatalf("%d copies, %d outcomes in the digest", s.Align.Counters[ingest.ReasonDuplicate], live.Count())
	}
	for _, from := range append([]uint64{0, 2, 100, s.Seq}, seqs...) {
		p, err := OpenReplay(ctx, f, NewMachine(parser(t)), from)
		if err != nil {
			t.Fatal(err)
		}
		var got []string
		err = p.Run(ctx, 0, func(_ *ingest.Record, outs []Outcome) error {
			for _, o := range outs {
				got = append(got, fmt.Sprint(o.Kind, o.N, o.T, o.Past))
			}
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
		state, err := p.State.Encode(true)
		if err != nil {
			t.Fatal(err)
		}
		n := min(len(got), len(outs)-gapped)
		if !bytes.Equal(state, want) || p.Digest.String() != live.String() || !slices.Equal(got[len(got)-n:], outs[len(outs)-n:]) || n == 0 && from < s.Seq {
			t.Errorf("from record %d: digest %s, live %s; %d copies", from, p.Digest, live, p.State.Align.Counters[ingest.ReasonDuplicate])
		}
	}
	// Up to a record, then on.
	p, err := OpenReplay(ctx, f, NewMachine(parser(t)), 0)
	if err != nil {
		t.Fatal(err)
	}
	nothing := func(*ingest.Record, []Outcome) error { return nil }
	for _, upto := range []uint64{10, 500, 0} {
		if err := p.Run(ctx, upto, nothing); err != nil {
			t.Fatal(err)
		}
		if upto > 0 && p.State.Seq != upto {
			t.Errorf("at record %d, want %d", p.State.Seq, upto)
		}
	}
	if p.Digest.String() != live.String() || p.Digest.Count() != live.Count() {
		t.Error("in three parts the replay gives another digest")
	}
}
