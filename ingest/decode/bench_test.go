package decode

import (
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"strconv"
	"testing"

	"github.com/fxamacker/cbor/v2"

	"throatwatch/ingest"
)

// packs gives 64 different packs of 100 values, as a rig with 100 channels of
// 16-bit codes times a scale sends them.
func packs(format Format) [][]byte {
	rnd := rand.New(rand.NewPCG(1, 1))
	out := make([][]byte, 64)
	readings := make([]Reading, 100)
	for i := range out {
		at := host + int64(i)*50_000_000
		for k := range readings {
			readings[k] = Reading{Name: fmt.Sprintf("ch%03d", k), Unit: "kPa", Value: float64(rnd.IntN(65536)) * 1500 / 65535}
		}
		switch format {
		case SenMLJSON:
			out[i] = AppendSenMLJSON(nil, "rig:", at, readings)
		case SenMLCBOR:
			out[i] = AppendSenMLCBOR(nil, "rig:", at, readings)
		case Lines:
			for _, r := range readings {
				out[i] = fmt.Appendf(out[i], "rig:%s value=%v %d\n", r.Name, r.Value, at)
			}
		case Value: // as many messages as values: one of them here
			out[i] = fmt.Appendf(nil, `{"t":%d.%06d,"v":%v}`, at/1_000_000_000, at/1000%1_000_000, readings[i].Value)
		case FormatInvalid, numFormats:
		}
	}
	return out
}

var sink float64

func BenchmarkDecode(b *testing.B) {
	for f := SenMLJSON; f < numFormats; f++ {
		b.Run(f.String(), func(b *testing.B) {
			input := packs(f)
			d := New(Limits{})
			values, bytes := 0, 0
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				p := input[i%len(input)]
				r := d.Decode(f, "rigs/a/channels/ch001", p, host)
				for k := range r.Samples {
					sink += r.Samples[k].Value
				}
				values += len(r.Samples)
				bytes += len(p)
			}
			b.ReportMetric(float64(values)/b.Elapsed().Seconds()/1e6, "Mvalues/s")
			b.ReportMetric(float64(bytes)/float64(values), "B/value")
		})
	}
}

// The same packs by the general libraries, for comparison.
type plainRecord struct {
	BN string   `json:"bn" cbor:"-2,keyasint"`
	BT float64  `json:"bt" cbor:"-3,keyasint"`
	N  string   `json:"n" cbor:"0,keyasint"`
	U  string   `json:"u" cbor:"1,keyasint"`
	V  *float64 `json:"v" cbor:"2,keyasint"`
}

func BenchmarkLibrary(b *testing.B) {
	for name, c := range map[string]struct {
		format    Format
		unmarshal func([]byte, any) error
	}{"encoding-json": {SenMLJSON, json.Unmarshal}, "fxamacker-cbor": {SenMLCBOR, cbor.Unmarshal}} {
		b.Run(name, func(b *testing.B) {
			input := packs(c.format)
			var records []plainRecord
			values := 0
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				records = records[:0]
				if err := c.unmarshal(input[i%len(input)], &records); err != nil {
					b.Fatal(err)
				}
				for k := range records {
					sink += *records[k].V
				}
				values += len(records)
			}
			b.ReportMetric(float64(values)/b.Elapsed().Seconds()/1e6, "Mvalues/s")
		})
	}
}

func BenchmarkAppendSenML(b *testing.B) {
	readings := make([]Reading, 100)
	for k := range readings {
		readings[k] = Reading{Name: "ch" + strconv.Itoa(k), Unit: "kPa", Value: float64(k) * 1500 / 65535}
	}
	for name, encode := range map[string]func([]byte, string, int64, []Reading) []byte{"json": AppendSenMLJSON, "cbor": AppendSenMLCBOR} {
		b.Run(name, func(b *testing.B) {
			var buf []byte
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				readings[i%100].Value += 0.1
				buf = encode(buf[:0], "rig:", host+int64(i)*1000, readings)
				sink += float64(len(buf))
			}
		})
	}
}

// TestAllocations holds the budget: nothing per message, line protocol one
// decoder of its library with a buffer.
func TestAllocations(t *testing.T) {
	for f, budget := range map[Format]float64{SenMLJSON: 0, SenMLCBOR: 0, Lines: 2, Value: 0} {
		input := packs(f)
		d := New(Limits{})
		i := 0
		var faults uint32
		got := testing.AllocsPerRun(200, func() {
			r := d.Decode(f, "rigs/a/channels/ch001", input[i%len(input)], host)
			faults += r.Faults.Total()
			i++
		})
		if got > budget || faults > 0 {
			t.Errorf("%s: %v allocations, budget %v; %d faults", f, got, budget, faults)
		}
	}
	// Messages with faults cost nothing either: a dead probe sends NaN for hours.
	d := New(Limits{})
	pack := []byte(`[{"n":"p","v":NaN},{"n":"q","vs":"open"},{"n":"r","v":1}]`)
	if got := testing.AllocsPerRun(200, func() {
		if d.Decode(SenMLJSON, "", pack, host).Faults[ingest.ReasonNotFinite] != 1 {
			t.Error("NaN was not counted")
		}
	}); got > 0 {
		t.Errorf("%v allocations for a pack with faults", got)
	}
}
