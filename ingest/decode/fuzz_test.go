package decode

import (
	"bytes"
	"encoding/json"
	"math"
	"strconv"
	"testing"
	"unicode/utf8"

	"throatwatch/ingest"
)

// FuzzDecode throws bytes at all formats. Whatever comes, the promises of the
// package hold.
func FuzzDecode(f *testing.F) {
	for _, c := range rows {
		if len(c.payload) < 4096 {
			f.Add(uint8(c.format), c.topic, []byte(c.payload))
		}
	}
	d := New(Limits{Records: 64})
	f.Fuzz(func(t *testing.T, format uint8, topic string, payload []byte) {
		before := bytes.Clone(payload)
		r := d.Decode(Format(format%uint8(numFormats)), topic, payload, host)
		if !bytes.Equal(before, payload) {
			t.Fatal("payload was changed")
		}
		if len(r.Samples) > 64 || len(d.names) > 64*MaxName+2*len(payload) {
			t.Fatalf("%d samples, %d bytes of names", len(r.Samples), len(d.names))
		}
		if r.Refused && (len(r.Samples) > 0 || r.Fault == nil) {
			t.Fatalf("refused with %d samples, %v", len(r.Samples), r.Fault)
		}
		if (r.Fault == nil) != (r.Faults.Total() == 0) {
			t.Fatalf("%v with %d faults", r.Fault, r.Faults.Total())
		}
		if r.Fault != nil && (r.Fault.Error() == "" || r.Fault.Offset > len(payload)) {
			t.Fatalf("fault %+v", r.Fault)
		}
		for _, s := range r.Samples {
			if math.IsNaN(s.Value) || math.IsInf(s.Value, 0) {
				t.Fatalf("%s is %v", s.Name, s.Value)
			}
			if len(s.Name) == 0 || len(s.Name) > MaxName {
				t.Fatalf("name %q", s.Name)
			}
			if r.DeviceTime && s.Time == ingest.NoTime {
				t.Fatalf("%s has no time, message has device time", s.Name)
			}
		}
	})
}

// FuzzScanner compares the JSON scanner with the standard library: what is JSON
// there is JSON here, and means the same.
func FuzzScanner(f *testing.F) {
	for _, s := range []string{rfcSeries, rfcTypes, `"\ud800\u0041"`, `"\ud83d\ude00\/"`, `[1e5,-0,0.1E-2,null,{"a":{}}]`, `{"a":1,}`, `[1 2]`, `"a` + "\n" + `"`, `NaN`, `[tru]`} {
		f.Add([]byte(s))
	}
	d := New(Limits{})
	f.Fuzz(func(t *testing.T, b []byte) {
		d.names = d.names[:0]
		s := scanner{b: b, d: d}
		s.skip(0)
		s.end()
		if json.Valid(b) && s.what != "" && s.what != "arrays or objects are nested too deep" {
			t.Fatalf("%q is JSON, but byte %d: %s", b, s.at, s.what)
		}
		if !json.Valid(b) || !utf8.Valid(b) {
			return
		}
		var v any
		if json.Unmarshal(b, &v) != nil {
			return // a number beyond float64
		}
		s = scanner{b: b, d: d}
		switch v := v.(type) {
		case string:
			if s.peek(); string(s.text()) != v {
				t.Fatalf("%q: text differs from %q", b, v)
			}
		case float64:
			if got, reason := s.number(); got != v || reason != ingest.ReasonNone {
				t.Fatalf("%q: %v (%v), want %v", b, got, reason, v)
			}
		}
	})
}

// FuzzRoundTrip: what the encoder writes, the decoder gives back bit for bit.
func FuzzRoundTrip(f *testing.F) {
	f.Add("rig:a:", "p3", "Pa", uint64(0x40f8bcd000000000), int64(1774747800123456), 3)
	f.Add("", "n", "", uint64(1), int64(1<<28*1_000_000), 1)
	f.Add("r/", "x.y", `a"b\`+"\n", math.Float64bits(math.Copysign(0, -1)), int64(4e15), 0)
	f.Add("", "n", "K", math.Float64bits(math.NaN()), int64(1774747800000001), 2)
	d := New(Limits{})
	f.Fuzz(func(t *testing.T, base, name, unit string, bits uint64, us int64, n int) {
		n &= 0xff
		us &= 1<<52 - 1 // to the year 2112: beyond, float64 seconds lose the microsecond
		if us < 1<<28*1_000_000 || !validName([]byte(base+name)) || len(base)+len(name) > MaxName || !utf8.ValidString(unit) {
			return
		}
		readings := make([]Reading, n)
		var want []ingest.Sample
		for i := range readings {
			v := math.Float64frombits(bits ^ uint64(i))
			readings[i] = Reading{Name: name, Unit: unit, Value: v}
			if !math.IsNaN(v) && !math.IsInf(v, 0) {
				want = append(want, ingest.Sample{Name: []byte(base + name), Unit: []byte(unit), Time: us * 1000, Value: v})
			}
		}
		for format, pack := range map[Format][]byte{
			SenMLJSON: AppendSenMLJSON(nil, base, us*1000, readings),
			SenMLCBOR: AppendSenMLCBOR(nil, base, us*1000, readings),
		} {
			r := d.Decode(format, "", pack, host)
			if r.Refused || len(r.Samples) != len(want) {
				t.Fatalf("%s: %d samples, want %d: %v\n%s", format, len(r.Samples), len(want), r.Fault, pack)
			}
			if format == SenMLJSON && !json.Valid(pack) {
				t.Fatalf("not JSON: %s", pack)
			}
			for i, got := range r.Samples {
				w := want[i]
				if !bytes.Equal(got.Name, w.Name) || !bytes.Equal(got.Unit, w.Unit) || got.Time != w.Time ||
					math.Float64bits(got.Value) != math.Float64bits(w.Value+0) {
					t.Fatalf("%s: %s, want %s", format, show(r.Samples[i:i+1]), show(want[i:i+1]))
				}
			}
		}
	})
}

// FuzzExact holds the short way of reading a number against the standard
// library's: where it takes something, it gives the same bits.
func FuzzExact(f *testing.F) {
	for _, s := range []string{"0", "-0", "7.", ".5", "-", "101.325", "9007199254740993", "123456789012345.678", "0.1e3", "00.30", "-9999", "1.2.3", "999999999999999999", "0.000000000000000001"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		v, n := exact([]byte(s))
		if n == 0 {
			return
		}
		want, err := strconv.ParseFloat(s[:n], 64)
		if err != nil || math.Float64bits(v) != math.Float64bits(want) {
			t.Errorf("exact(%q) = %v of %q, want %v (%v)", s, v, s[:n], want, err)
		}
	})
}

// FuzzPlain: a record that is read in one go means the same as one with white space,
// which is read the general way.
func FuzzPlain(f *testing.F) {
	for _, s := range []string{
		rfcSeries, rfcTypes, `[{"n":"a","u":"K","v":1.5,"t":-2}]`, `[{"v":1,"n":"a","v":2}]`, `[{"bn":"r:","bt":1.7e9,"n":"a","v":1e3},{"n":"b","v":-0,"u":"K"}]`,
		`[{"n":"a","v":1,"x":2}]`, `[{"n":"a\u0062","v":1}]`, `[{"n":"a","v":null},{"n":"b","v":"1"}]`, `[{"n":"a"},{"u":"K","v":1}]`, `[{"t":1e300,"n":"a","v":1}]`,
	} {
		f.Add([]byte(s))
	}
	one, two := New(Limits{}), New(Limits{})
	f.Fuzz(func(t *testing.T, b []byte) {
		var spaced bytes.Buffer
		if json.Indent(&spaced, b, "", " ") != nil {
			return
		}
		got, want := one.Decode(SenMLJSON, "", b, host), two.Decode(SenMLJSON, "", spaced.Bytes(), host)
		if got.Faults != want.Faults || got.Refused != want.Refused || got.DeviceTime != want.DeviceTime || len(got.Samples) != len(want.Samples) {
			t.Fatalf("%s: %d samples, %v; with white space %d, %v", b, len(got.Samples), got.Fault, len(want.Samples), want.Fault)
		}
		for i, s := range got.Samples {
			if w := want.Samples[i]; !bytes.Equal(s.Name, w.Name) || !bytes.Equal(s.Unit, w.Unit) || s.Time != w.Time || math.Float64bits(s.Value) != math.Float64bits(w.Value) {
				t.Fatalf("%s: sample %d is %+v, with white space %+v", b, i, s, w)
			}
		}
	})
}
