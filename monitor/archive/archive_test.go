package archive

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"testing"

	"github.com/cespare/xxhash/v2"
)

const start = int64(1774747800_000000000) // 2026-03-29 01:30:00 UTC

// signal makes one column of n rows the way a rig would.
type signal struct {
	name  string
	scale float64
	row   func(r *rand.Rand, i int) float64
}

var signals = []signal{
	{"adc16", 1500.0 / 65535, func(r *rand.Rand, i int) float64 {
		return math.Round(30000+8000*math.Sin(float64(i)/300)+3*r.NormFloat64()) * (1500.0 / 65535)
	}},
	{"adc24", 1500.0 / 16777215, func(r *rand.Rand, i int) float64 {
		return math.Round(8e6+2e6*math.Sin(float64(i)/300)+30*r.NormFloat64()) * (1500.0 / 16777215)
	}},
	{"adc16 with gaps", 0.1, func(r *rand.Rand, i int) float64 {
		if i%37 == 5 {
			return math.NaN()
		}
		return float64(20000+r.IntN(7)) * 0.1
	}},
	{"decimal, step not declared", 0, func(r *rand.Rand, _ int) float64 { return float64(20000+r.IntN(7)) / 10 }},
	{"mean in kelvin", 0, func(r *rand.Rand, i int) float64 {
		if i%97 == 11 {
			return math.NaN()
		}
		return math.Round(25*(500+20*math.Sin(float64(i)/300)+r.NormFloat64()))/25/5 + 273.15
	}},
	{"pulses per minute in radians", 0, func(r *rand.Rand, _ int) float64 { return float64(15000+r.IntN(90)) * math.Pi / 30 }},
	{"computed, smooth", 0, func(_ *rand.Rand, i int) float64 { return 2.4 + 0.3*math.Sin(float64(i)/500) }},
	{"computed, noisy", 0, func(r *rand.Rand, i int) float64 { return 2.4 + 0.3*math.Sin(float64(i)/500) + 1e-3*r.NormFloat64() }},
	{"computed, half missing", 0, func(r *rand.Rand, i int) float64 {
		if i%1200 < 600 {
			return math.NaN()
		}
		return 900 + r.NormFloat64()
	}},
	{"held", 0, func(_ *rand.Rand, i int) float64 { return 101325 + float64(i/200)*0.37 }},
	{"constant", 0, func(*rand.Rand, int) float64 { return 0.025 }},
	{"missing", 0, func(*rand.Rand, int) float64 { return math.NaN() }},
	{"any bits", 0, func(r *rand.Rand, _ int) float64 { return math.Float64frombits(r.Uint64()) }},
	{"signed zeros", 1, func(r *rand.Rand, _ int) float64 { return math.Copysign(0, float64(r.IntN(2))-0.5) }},
	{"zero and infinities", 1, func(r *rand.Rand, _ int) float64 { return [...]float64{0, math.Inf(1), math.Inf(-1)}[r.IntN(3)] }},
	{"step that does not fit", 0.1, func(_ *rand.Rand, i int) float64 { return float64(i) / 10 }},
	{"negative step", -1, func(_ *rand.Rand, i int) float64 { return float64(i % 3) }},
}

// rigChunk is a chunk of n rows with all signals and two byte columns.
func rigChunk(n int, seed uint64) *Chunk {
	r := rand.New(rand.NewPCG(seed, 1))
	c := &Chunk{Times: make([]int64, n)}
	for i := range c.Times {
		c.Times[i] = start + int64(i)*50_000_000
	}
	for _, s := range signals {
		col := Column{Name: s.name, Kind: KindFloat, Scale: s.scale, Float: make([]float64, n)}
		for i := range n {
			col.Float[i] = s.row(r, i)
		}
		c.Columns = append(c.Columns, col)
	}
	quality, state := make([]byte, n), make([]byte, n)
	for i := range n {
		quality[i], state[i] = 1, byte(2+i/700%2)
		if i == n/2 {
			quality[i] = 3
		}
	}
	c.Columns = append(c.Columns, Column{Name: "quality", Kind: KindByte, Byte: quality},
		Column{Name: "choke_state", Kind: KindByte, Byte: state})
	return c
}

// same tells whether two columns are equal to the bit, all NaN being one.
func same(a, b *Column) bool {
	return a.Name == b.Name && a.Kind == b.Kind && bytes.Equal(a.Byte, b.Byte) &&
		slices.EqualFunc(a.Float, b.Float, func(x, y float64) bool { return canonical(x) == canonical(y) })
}

func mustAppend(tb testing.TB, codec *Codec, c *Chunk) []byte {
	tb.Helper()
	b, err := codec.Append(nil, c)
	if err != nil {
		tb.Fatal(err)
	}
	return b
}

func TestRoundTrip(t *testing.T) {
	codec := NewCodec()
	var got Chunk // one for all: a buffer must not keep anything
	for _, n := range []int{1, 2, 3, 1200, 5, 4000} {
		want := rigChunk(n, uint64(n))
		packed := mustAppend(t, codec, want)
		if err := codec.Decode(&got, packed, nil); err != nil {
			t.Fatalf("%d rows: %v", n, err)
		}
		if !slices.Equal(got.Times, want.Times) || len(got.Columns) != len(want.Columns) {
			t.Fatalf("%d rows: times or number of columns differ", n)
		}
		for i := range want.Columns {
			if !same(&got.Columns[i], &want.Columns[i]) {
				t.Errorf("%d rows: column %q differs", n, want.Columns[i].Name)
			}
		}
		if again := mustAppend(t, codec, &got); n > 3 && len(again) > len(packed) {
			t.Errorf("%d rows: %d bytes when packed again, %d before: a step was lost", n, len(again), len(packed))
		}
	}
}

// TestEncodings pins which encoding each kind of signal ends in, so that a change
// that silently loses the compact ones is seen.
func TestEncodings(t *testing.T) {
	want := map[string]encoding{
		"adc16": encCodes, "adc24": encCodes, "adc16 with gaps": encCodes, "constant": encConstant, "missing": encConstant,
		"computed, noisy": encXOR, "decimal, step not declared": encDistinct,
		"mean in kelvin": encDecimals, "pulses per minute in radians": encDistinct, "quality": encBytes,
	}
	codec := NewCodec()
	h, err := ReadHead(mustAppend(t, codec, rigChunk(1200, 7)))
	if err != nil {
		t.Fatal(err)
	}
	for i := range h.Columns {
		e := &h.Columns[i]
		if w, ok := want[e.Name]; ok && e.encoding&^flagZstd != w {
			t.Errorf("%s: encoding %d, want %d", e.Name, e.encoding&^flagZstd, w)
		}
	}
}

// TestVersion1: what the version before has written is read. The file is
// rigChunk(60, 3) without the signals that came later.
func TestVersion1(t *testing.T) {
	packed, err := os.ReadFile("testdata/version1.chunk")
	if err != nil {
		t.Fatal(err)
	}
	if packed[len(magic)] != 1 {
		t.Fatalf("the file is of version %d", packed[len(magic)])
	}
	var got Chunk
	if err := NewCodec().Decode(&got, packed, nil); err != nil {
		t.Fatal(err)
	}
	want := rigChunk(60, 3)
	if !slices.Equal(got.Times, want.Times) || len(got.Columns) != 17 {
		t.Fatalf("%d rows, %d columns", len(got.Times), len(got.Columns))
	}
	for _, name := range []string{"adc16", "adc24", "adc16 with gaps", "decimal, step not declared", "computed, smooth", "constant", "missing", "quality", "choke_state"} {
		is := func(c Column) bool { return c.Name == name }
		i, k := slices.IndexFunc(got.Columns, is), slices.IndexFunc(want.Columns, is)
		if i < 0 || !same(&got.Columns[i], &want.Columns[k]) {
			t.Errorf("column %q differs", name)
		}
	}
	packed[len(magic)] = version + 1
	if err := NewCodec().Decode(&got, packed, nil); !errors.Is(err, ErrVersion) {
		t.Errorf("a later version gives %v, want ErrVersion", err)
	}
}

func TestTimes(t *testing.T) {
	codec := NewCodec()
	r := rand.New(rand.NewPCG(3, 3))
	wild := make([]int64, 500)
	for i := range wild {
		wild[i] = int64(r.Uint64())
	}
	for name, times := range map[string][]int64{
		"one": {start}, "falling": {5, 3, 1}, "extremes": {math.MinInt64, math.MaxInt64, math.MinInt64, 0}, "wild": wild,
	} {
		packed := mustAppend(t, codec, &Chunk{Times: times})
		var got Chunk
		if err := codec.Decode(&got, packed, nil); err != nil || !slices.Equal(got.Times, times) {
			t.Errorf("%s: %v, %v", name, got.Times, err)
		}
		if h, err := ReadHead(packed); err != nil || h.First != times[0] || h.Last != times[len(times)-1] || h.Rows != len(times) {
			t.Errorf("%s: head %+v, %v", name, h, err)
		}
	}
}

func TestChosenColumns(t *testing.T) {
	codec := NewCodec()
	want := rigChunk(1200, 9)
	packed := mustAppend(t, codec, want)
	for _, c := range []struct{ ask, get []string }{
		{[]string{}, nil},
		{[]string{"choke_state", "adc16"}, []string{"adc16", "choke_state"}},
		{[]string{"held", "no such"}, []string{"held"}},
	} {
		var got Chunk
		if err := codec.Decode(&got, packed, c.ask); err != nil {
			t.Fatal(err)
		}
		var names []string
		for i := range got.Columns {
			names = append(names, got.Columns[i].Name)
			k := slices.IndexFunc(want.Columns, func(w Column) bool { return w.Name == got.Columns[i].Name })
			if !same(&got.Columns[i], &want.Columns[k]) {
				t.Errorf("%q differs", got.Columns[i].Name)
			}
		}
		if !slices.Equal(names, c.get) || len(got.Times) != 1200 {
			t.Errorf("asked for %q, got %q", c.ask, names)
		}
	}
}

func TestHead(t *testing.T) {
	nan := math.NaN()
	packed := mustAppend(t, NewCodec(), &Chunk{Times: []int64{10, 20, 30}, Columns: []Column{
		{Name: "p", Kind: KindFloat, Float: []float64{3, nan, -2}},
		{Name: "q", Kind: KindFloat, Float: []float64{nan, nan, nan}},
		{Name: "s", Kind: KindByte, Byte: []byte{4, 2, 250}},
	}})
	h, err := ReadHead(packed)
	if err != nil {
		t.Fatal(err)
	}
	got := fmt.Sprint(h.Rows, h.First, h.Last)
	size := h.blocks + h.times.length
	for _, e := range h.Columns {
		got += fmt.Sprint(" ", e.Name, e.Kind, e.Min, e.Max, e.Missing)
		size += e.Size()
	}
	if want := "3 10 30 p1 -2 3 1 q1 NaN NaN 3 s2 2 250 0"; got != want {
		t.Errorf("head %s, want %s", got, want)
	}
	if size != len(packed) {
		t.Errorf("sizes add up to %d of %d bytes", size, len(packed))
	}
}

func TestWriterRefuses(t *testing.T) {
	one := []int64{1}
	for name, c := range map[string]*Chunk{
		"no rows":      {},
		"unequal":      {Times: one, Columns: []Column{{Name: "a", Kind: KindFloat, Float: []float64{1, 2}}}},
		"no kind":      {Times: one, Columns: []Column{{Name: "a", Float: []float64{1}}}},
		"twice":        {Times: one, Columns: []Column{{Name: "a", Kind: KindByte, Byte: []byte{1}}, {Name: "a", Kind: KindByte, Byte: []byte{1}}}},
		"no name":      {Times: one, Columns: []Column{{Kind: KindByte, Byte: []byte{1}}}},
		"too many":     {Times: make([]int64, MaxRows+1)},
		"too many all": {Times: make([]int64, MaxRows), Columns: make([]Column, 17)},
	} {
		if b, err := NewCodec().Append([]byte("kept"), c); err == nil || string(b) != "kept" {
			t.Errorf("%s: %q, %v", name, b, err)
		}
	}
}

func TestLargestChunk(t *testing.T) {
	codec := NewCodec()
	r := rand.New(rand.NewPCG(5, 5))
	want := &Chunk{Times: make([]int64, MaxRows), Columns: []Column{{Name: "x", Kind: KindFloat, Float: make([]float64, MaxRows)}}}
	for i := range want.Times {
		want.Times[i] = int64(r.Uint64()) // ten bytes each, the most there is
		want.Columns[0].Float[i] = r.NormFloat64()
	}
	var got Chunk
	if err := codec.Decode(&got, mustAppend(t, codec, want), nil); err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(got.Times, want.Times) || !same(&got.Columns[0], &want.Columns[0]) {
		t.Error("differs")
	}
}

// TestDamage changes every byte of a chunk in turn: it is always noticed, and a
// damaged column does not keep the others from being read.
func TestDamage(t *testing.T) {
	codec := NewCodec()
	packed := mustAppend(t, codec, rigChunk(100, 11))
	h, err := ReadHead(packed)
	if err != nil {
		t.Fatal(err)
	}
	where := func(at int) string {
		at -= h.blocks
		switch {
		case at < 0:
			return ""
		case at < h.times.length:
			return timesName
		}
		for _, e := range h.Columns {
			if at < e.offset+e.length {
				return e.Name
			}
		}
		return "outside"
	}
	var got Chunk
	for at := range packed {
		packed[at] ^= 0x55
		err := codec.Decode(&got, packed, nil)
		corrupt := (*CorruptError)(nil)
		switch {
		case at == len(magic):
			if !errors.Is(err, ErrVersion) {
				t.Fatalf("byte %d: %v, want ErrVersion", at, err)
			}
		case !errors.As(err, &corrupt) || !errors.Is(err, ErrCorrupt):
			t.Fatalf("byte %d: %v, want a CorruptError", at, err)
		case corrupt.Column != where(at):
			t.Fatalf("byte %d: column %q, want %q", at, corrupt.Column, where(at))
		case where(at) == "adc16":
			if err := codec.Decode(&got, packed, []string{"held"}); err != nil || len(got.Columns) != 1 {
				t.Fatalf("byte %d: other columns: %v", at, err)
			}
		}
		packed[at] ^= 0x55
	}
	for n := range packed {
		if err := codec.Decode(&got, packed[:n], nil); !errors.Is(err, ErrCorrupt) {
			t.Fatalf("cut to %d bytes: %v", n, err)
		}
	}
	if err := codec.Decode(&got, append(slices.Clone(packed), 0), nil); !errors.Is(err, ErrCorrupt) {
		t.Fatalf("a byte too many: %v", err)
	}
}

// seal puts right checksum and length over a directory, as a hostile writer would.
func seal(directory, blocks []byte) []byte {
	b := append([]byte(magic), version)
	b = binary.LittleEndian.AppendUint64(b, xxhash.Sum64(directory))
	b = binary.LittleEndian.AppendUint32(b, uint32(len(directory)))
	return append(append(b, directory...), blocks...)
}

// FuzzHead seals arbitrary directories, so that the fuzzer gets past the checksum.
func FuzzHead(f *testing.F) {
	codec := NewCodec()
	for _, n := range []int{1, 40} {
		packed, err := codec.Append(nil, rigChunk(n, 1))
		if err != nil {
			f.Fatal(err)
		}
		h, err := ReadHead(packed)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(packed[headLength:h.blocks], packed[h.blocks:])
	}
	f.Add([]byte{0xc0, 0x84, 0x3d, 0, 0, 0xff, 0xff, 3}, []byte{1})
	var got Chunk
	f.Fuzz(func(t *testing.T, directory, blocks []byte) {
		src := seal(directory, blocks)
		h, err := ReadHead(src)
		if err == nil {
			if h.Rows > MaxRows || h.Rows*len(h.Columns) > MaxCells || len(h.Columns) > len(directory) {
				t.Fatalf("%d rows, %d columns out of %d bytes", h.Rows, len(h.Columns), len(directory))
			}
			err = codec.Decode(&got, src, nil)
		}
		if err != nil && !errors.Is(err, ErrCorrupt) {
			t.Fatal(err)
		}
	})
}

// FuzzBlock gives one arbitrary block with a right checksum to the times, to a float
// and to a byte column. Decode refuses it, or what it reads is written and read again
// without a change.
func FuzzBlock(f *testing.F) {
	codec := NewCodec()
	seed := rigChunk(40, 1)
	packed, err := codec.Append(nil, seed)
	if err != nil {
		f.Fatal(err)
	}
	h, err := ReadHead(packed)
	if err != nil {
		f.Fatal(err)
	}
	f.Add(uint16(40), uint8(h.times.encoding), 1.0, packed[h.blocks:h.blocks+h.times.length])
	for _, e := range h.Columns {
		f.Add(uint16(40), uint8(e.encoding), e.scale, packed[h.blocks+e.offset:h.blocks+e.offset+e.length])
	}
	times := h.times
	timesBytes := packed[h.blocks : h.blocks+times.length]
	var got, second Chunk
	f.Fuzz(func(t *testing.T, rows uint16, enc uint8, scale float64, stored []byte) {
		b := block{encoding: encoding(enc), length: len(stored), sum: xxhash.Sum64(stored), scale: scale}
		for _, src := range [][]byte{
			append((&Head{Rows: int(rows), times: b}).append(nil), stored...),
			append(append((&Head{Rows: 40, times: times, Columns: []Entry{{Name: "f", Kind: KindFloat, block: b}}}).append(nil), timesBytes...), stored...),
			append(append((&Head{Rows: 40, times: times, Columns: []Entry{{Name: "b", Kind: KindByte, block: b}}}).append(nil), timesBytes...), stored...),
		} {
			if err := codec.Decode(&got, src, nil); err != nil {
				if !errors.Is(err, ErrCorrupt) {
					t.Fatal(err)
				}
				continue
			}
			if cap(codec.raw) > 1<<20 {
				t.Fatalf("buffer of %d bytes for %d rows", cap(codec.raw), len(got.Times))
			}
			if err := codec.Decode(&second, mustAppend(t, codec, &got), nil); err != nil || !slices.Equal(second.Times, got.Times) {
				t.Fatalf("second round: %v", err)
			}
			for i := range got.Columns {
				if !same(&got.Columns[i], &second.Columns[i]) {
					t.Fatalf("column %q differs in the second round", got.Columns[i].Name)
				}
			}
		}
	})
}

// FuzzRoundTrip packs columns made of arbitrary bytes.
func FuzzRoundTrip(f *testing.F) {
	f.Add([]byte("0123456789abcdef01234567"), 0.1, int64(50_000_000))
	f.Add(bytes.Repeat([]byte{0, 0, 0, 0, 0, 0, 0xf8, 0x7f, 0, 0, 0, 0, 0, 0, 0xf0, 0x3f}, 9), 1.0, int64(-1))
	codec := NewCodec()
	var got Chunk
	f.Fuzz(func(t *testing.T, b []byte, scale float64, step int64) {
		n := min(len(b)/8, 5000)
		if n == 0 {
			return
		}
		c := &Chunk{Times: make([]int64, n), Columns: []Column{
			{Name: "bits", Kind: KindFloat, Scale: scale, Float: make([]float64, n)},
			{Name: "codes", Kind: KindFloat, Scale: scale, Float: make([]float64, n)},
			{Name: "bytes", Kind: KindByte, Byte: b[:n]},
		}}
		for i := range n {
			u := binary.LittleEndian.Uint64(b[8*i:])
			c.Times[i] = start + int64(i)*step + int64(b[i])
			c.Columns[0].Float[i] = math.Float64frombits(u)
			c.Columns[1].Float[i] = float64(int64(u)>>(u&63)) * scale
		}
		packed := mustAppend(t, codec, c)
		if err := codec.Decode(&got, packed, nil); err != nil {
			t.Fatal(err)
		}
		if !slices.Equal(got.Times, c.Times) {
			t.Fatal("times differ")
		}
		for i := range c.Columns {
			if !same(&got.Columns[i], &c.Columns[i]) {
				t.Fatalf("column %q differs", c.Columns[i].Name)
			}
		}
	})
}

var sink int

// BenchmarkCodec packs and unpacks one minute at 20 scans/s, a column of each kind
// of signal alone, and gives the bytes that a value takes, times not counted.
func BenchmarkCodec(b *testing.B) {
	const rows = 1200
	var varied []*Chunk
	for seed := range uint64(8) {
		varied = append(varied, rigChunk(rows, seed))
	}
	codec := NewCodec()
	for i, s := range signals {
		var chunks []*Chunk
		var packed [][]byte
		size := 0
		for _, v := range varied {
			c := &Chunk{Times: v.Times, Columns: v.Columns[i : i+1]}
			p := mustAppend(b, codec, c)
			h, err := ReadHead(p)
			if err != nil {
				b.Fatal(err)
			}
			size += h.Columns[0].Size()
			chunks, packed = append(chunks, c), append(packed, p)
		}
		perValue := float64(size) / float64(rows*len(varied))
		b.Run(s.name+"/encode", func(b *testing.B) {
			var buf []byte
			b.ReportAllocs()
			for k := 0; b.Loop(); k++ {
				var err error
				if buf, err = codec.Append(buf[:0], chunks[k%len(chunks)]); err != nil {
					b.Fatal(err)
				}
				sink += len(buf)
			}
			b.ReportMetric(perValue, "B/value")
			b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds()/1e6, "Mvalues/s")
		})
		b.Run(s.name+"/decode", func(b *testing.B) {
			var got Chunk
			b.ReportAllocs()
			for k := 0; b.Loop(); k++ {
				if err := codec.Decode(&got, packed[k%len(packed)], nil); err != nil {
					b.Fatal(err)
				}
				sink += len(got.Columns)
			}
			b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds()/1e6, "Mvalues/s")
		})
	}
}
