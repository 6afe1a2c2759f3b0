package decode_test

import (
	"math"
	"testing"

	"throatwatch/ingest/decode"
)

// What is written as lines is decoded as it was: names, the time to the nanosecond,
// values to the last bit. What no line can hold is left out, or told.
func TestAppendLines(t *testing.T) {
	const at = 1772442000000000123
	readings := []decode.Reading{
		{Name: "p7_1", Value: 0.1 + 0.2},
		{Name: "rig,a=b.c", Value: -math.SmallestNonzeroFloat64},
		{Name: "gone", Value: math.NaN()},
		{Name: "Δp", Value: math.MaxFloat64},
		{Name: "far", Value: math.Inf(1)},
	}
	b, err := decode.AppendLines([]byte("p0 value=1 1\n"), at, readings)
	if err != nil {
		t.Fatal(err)
	}
	res := decode.New(decode.Limits{}).Decode(decode.Lines, "x", b, 0)
	want := []decode.Reading{{Name: "p0", Value: 1}, readings[0], readings[1], readings[3]}
	if len(res.Samples) != len(want) || res.Fault != nil {
		t.Fatalf("%d samples of %d, %v, from %q", len(res.Samples), len(want), res.Fault, b)
	}
	for i, w := range want {
		s := res.Samples[i]
		stamp := int64(at)
		if i == 0 {
			stamp = 1
		}
		if string(s.Name) != w.Name || s.Value != w.Value || s.Time != stamp {
			t.Errorf("sample %d is %q %v at %d, want %q %v at %d", i, s.Name, s.Value, s.Time, w.Name, w.Value, stamp)
		}
	}
	for _, name := range []string{"a\nb", "#1", ""} {
		if b, err := decode.AppendLines(nil, at, []decode.Reading{{Name: name, Value: 1}}); err == nil {
			t.Errorf("the name %q gives %q", name, b)
		}
	}
}
