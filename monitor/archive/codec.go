package archive

import (
	"encoding/binary"
	"math"
	"slices"

	"github.com/cespare/xxhash/v2"
	"github.com/klauspost/compress/zstd"
)

// Codec packs and unpacks chunks. It keeps its buffers between calls and belongs to
// one goroutine; it starts none.
type Codec struct {
	zw *zstd.Encoder
	zr *zstd.Decoder

	raw, packed, best []byte   // an encoding, its zstd frame, the smallest so far
	bits              []uint64 // values of a column as encPlanes or encXOR store them, keys as encDistinct does
	keys              []uint64 // distinct ones of a column
	rests             []byte   // of decimals
	blocks            []byte
	entries           []Entry
}

// NewCodec gives a codec.
func NewCodec() *Codec {
	zw, err := zstd.NewWriter(nil,
		zstd.WithEncoderLevel(zstd.SpeedFastest),
		zstd.WithEncoderConcurrency(1),
		zstd.WithEncoderCRC(false), // each block has its xxhash64
		zstd.WithAllLitEntropyCompression(true),
	)
	if err != nil {
		panic("archive: options of the zstd writer: " + err.Error())
	}
	zr, err := zstd.NewReader(nil,
		zstd.WithDecoderConcurrency(1),
		zstd.WithDecoderMaxMemory(maxRaw),
		zstd.WithDecodeAllCapLimit(true), // never more than the block's rows can take
	)
	if err != nil {
		panic("archive: options of the zstd reader: " + err.Error())
	}
	return &Codec{zw: zw, zr: zr}
}

// maxRaw is the most that a block can be, unpacked: times, ten bytes each.
const maxRaw = MaxRows * binary.MaxVarintLen64

// Append appends the bytes of a chunk to dst. It returns an error for a chunk that
// breaks the limits, that has columns of unequal length, or names twice.
func (c *Codec) Append(dst []byte, chunk *Chunk) ([]byte, error) {
	if err := chunk.check(); err != nil {
		return dst, err
	}
	rows := len(chunk.Times)
	c.blocks = c.blocks[:0]
	h := Head{Rows: rows, First: chunk.Times[0], Last: chunk.Times[rows-1], Columns: c.entries[:0]}
	h.times = c.times(chunk.Times)
	for i := range chunk.Columns {
		col := &chunk.Columns[i]
		e := Entry{Name: col.Name, Kind: col.Kind}
		if col.Kind == KindFloat {
			e.Min, e.Max, e.Missing = extent(col.Float)
			e.block = c.floats(col.Float, col.Scale)
		} else {
			e.Min, e.Max = float64(slices.Min(col.Byte)), float64(slices.Max(col.Byte))
			e.block = c.bytes(col.Byte)
		}
		h.Columns = append(h.Columns, e)
	}
	c.entries = h.Columns
	return append(h.append(dst), c.blocks...), nil
}

// Decode unpacks the columns that are named in want, all for nil, none for an empty
// list; names that the chunk does not have are left out. The columns come in the
// chunk's order. The slices of dst are used again where they are large enough. It
// returns ErrVersion or a *CorruptError; dst then holds nothing of use.
func (c *Codec) Decode(dst *Chunk, src []byte, want []string) error {
	h, err := ReadHead(src)
	if err != nil {
		return err
	}
	blocks := src[h.blocks:]
	dst.Times = resize(dst.Times, h.Rows)
	if what := c.readTimes(dst.Times, blocks, &h.times); what != "" {
		return &CorruptError{Column: timesName, What: what}
	}
	columns := dst.Columns[:0]
	for i := range h.Columns {
		e := &h.Columns[i]
		if want != nil && !slices.Contains(want, e.Name) {
			continue
		}
		if len(columns) < cap(columns) {
			columns = columns[:len(columns)+1]
		} else {
			columns = append(columns, Column{})
		}
		col := &columns[len(columns)-1]
		col.Name, col.Kind, col.Scale = e.Name, e.Kind, e.scale
		var what string
		if e.Kind == KindFloat {
			col.Float, col.Byte = resize(col.Float, h.Rows), col.Byte[:0]
			what = c.readFloats(col.Float, blocks, &e.block)
		} else {
			col.Byte, col.Float = resize(col.Byte, h.Rows), col.Float[:0]
			what = c.readBytes(col.Byte, blocks, &e.block)
		}
		if what != "" {
			return &CorruptError{Column: e.Name, What: what}
		}
	}
	dst.Columns = columns
	return nil
}

// resize gives a slice of n elements, s itself where it has the room.
func resize[T any](s []T, n int) []T {
	return slices.Grow(s[:0], n)[:n]
}

// try compresses c.raw and keeps it, or its zstd frame if that is smaller, in c.best
// when it beats what is there. An empty c.best is beaten by anything.
func (c *Codec) try(b *block, enc encoding) {
	c.packed = c.zw.EncodeAll(c.raw, c.packed[:0])
	candidate := &c.packed
	if len(c.packed) < len(c.raw) {
		enc |= flagZstd
	} else {
		candidate = &c.raw
	}
	if len(c.best) == 0 || len(*candidate) < len(c.best) {
		c.best, *candidate = *candidate, c.best
		b.encoding = enc
	}
}

// put moves c.best to the blocks and completes its account.
func (c *Codec) put(b block) block {
	b.length = len(c.best)
	b.sum = xxhash.Sum64(c.best)
	c.blocks = append(c.blocks, c.best...)
	c.best = c.best[:0]
	return b
}

// open checks and decompresses a block into c.raw, or gives what is wrong with it.
// Nothing over most bytes is accepted, and nothing more is allocated.
func (c *Codec) open(blocks []byte, b *block, most int) (raw []byte, what string) {
	stored := blocks[b.offset : b.offset+b.length]
	if xxhash.Sum64(stored) != b.sum {
		return nil, "checksum"
	}
	if b.encoding&flagZstd == 0 {
		return stored, ""
	}
	c.raw = slices.Grow(c.raw[:0], most)
	raw, err := c.zr.DecodeAll(stored, c.raw[:0:most])
	if err != nil {
		return nil, err.Error()
	}
	return raw, ""
}

const wrongLength = "values do not fit the number of rows"

func (c *Codec) times(times []int64) block {
	var b block
	c.raw = c.raw[:0]
	var last, step int64
	for i, t := range times {
		d := t - last
		if i == 0 {
			c.raw = binary.AppendVarint(c.raw, t)
		} else {
			c.raw = binary.AppendVarint(c.raw, d-step)
			step = d
		}
		last = t
	}
	c.try(&b, encTimes)
	return c.put(b)
}

func (c *Codec) readTimes(dst []int64, blocks []byte, b *block) string {
	raw, what := c.open(blocks, b, len(dst)*binary.MaxVarintLen64)
	if what != "" {
		return what
	}
	if b.encoding&^flagZstd != encTimes {
		return "unknown encoding"
	}
	var last, step int64
	for i := range dst {
		v, n := binary.Varint(raw)
		if n <= 0 {
			return wrongLength
		}
		raw = raw[n:]
		if i == 0 {
			last = v
		} else {
			step += v
			last += step
		}
		dst[i] = last
	}
	if len(raw) > 0 {
		return wrongLength
	}
	return ""
}

func (c *Codec) bytes(values []byte) block {
	var b block
	first := values[0]
	if !slices.ContainsFunc(values, func(v byte) bool { return v != first }) {
		b.encoding = encConstant
		c.best = append(c.best[:0], first)
		return c.put(b)
	}
	c.raw = append(c.raw[:0], values...)
	c.try(&b, encBytes)
	return c.put(b)
}

func (c *Codec) readBytes(dst, blocks []byte, b *block) string {
	raw, what := c.open(blocks, b, len(dst))
	switch enc := b.encoding &^ flagZstd; {
	case what != "":
		return what
	case enc == encConstant && len(raw) == 1:
		for i := range dst {
			dst[i] = raw[0]
		}
	case enc == encBytes && len(raw) == len(dst):
		copy(dst, raw)
	default:
		return wrongLength
	}
	return ""
}

// canonical gives the bits of v, the same for every NaN.
func canonical(v float64) uint64 {
	if v != v {
		v = math.NaN()
	}
	return math.Float64bits(v)
}

func (c *Codec) floats(values []float64, scale float64) block {
	b := block{}
	first := canonical(values[0])
	if !slices.ContainsFunc(values, func(v float64) bool { return canonical(v) != first }) {
		b.encoding = encConstant
		c.best = binary.LittleEndian.AppendUint64(c.best[:0], first)
		return c.put(b)
	}
	if c.codes(values, scale) {
		b.scale = scale
		c.try(&b, encCodes)
		return c.put(b)
	}
	c.bits = resize(c.bits, len(values))
	var last uint64
	for i, v := range values {
		bits := canonical(v)
		c.bits[i] = bits ^ last
		if v == v {
			last = bits
		}
	}
	c.raw = c.transpose(c.raw[:0])
	c.try(&b, encXOR)
	for i, v := range values {
		c.bits[i] = canonical(v)
	}
	c.raw = c.transpose(c.raw[:0])
	c.try(&b, encPlanes)
	if c.decimals(values) {
		c.try(&b, encDecimals)
	}
	if c.distinct(values) {
		c.try(&b, encDistinct)
	}
	return c.put(b)
}

// codes writes the values as whole multiples of scale to c.raw. It gives false
// when one of them is none, to the last bit.
func (c *Codec) codes(values []float64, scale float64) bool {
	if !(scale > 0) {
		return false
	}
	c.raw = c.raw[:0]
	var last int64
	for _, v := range values {
		if v != v {
			c.raw = append(c.raw, 0)
			continue
		}
		q := math.Round(v / scale)
		if !(math.Abs(q) < 1<<52) || math.Float64bits(q*scale) != math.Float64bits(v) {
			return false
		}
		code := int64(q)
		if code == 0 && math.Signbit(v) {
			return false // −0 has no code
		}
		d := code - last
		c.raw = binary.AppendUvarint(c.raw, 1+(uint64(d)<<1^uint64(d>>63)))
		last = code
	}
	return true
}

// mostDigits is how many digits behind the point are looked for.
const mostDigits = 9

// decimal gives the whole number that makes v when divided by power, and by how many
// units in the last place that is beside v. It gives false when there is none.
func decimal(v, power float64) (number int64, rest int8, ok bool) {
	q := math.Round(v * power)
	if !(math.Abs(q) < 1<<52) {
		return 0, 0, false
	}
	d := int64(math.Float64bits(v)) - int64(math.Float64bits(float64(int64(q))/power)) // −0 has no number
	return int64(q), int8(d), d == int64(int8(d))
}

// decimals writes the values as decimal numbers to c.raw. Means of readings and
// readings in other units are such, but for the last place. It gives false when
// one of them is none.
func (c *Codec) decimals(values []float64) bool {
	digits := 0
	for _, v := range values {
		for v == v {
			if _, _, ok := decimal(v, math.Pow10(digits)); ok {
				break
			}
			if digits++; digits > mostDigits {
				return false
			}
		}
	}
	power := math.Pow10(digits)
	c.raw = append(c.raw[:0], byte(digits))
	c.rests = c.rests[:0]
	var last int64
	for _, v := range values {
		if v != v {
			c.raw, c.rests = append(c.raw, 0), append(c.rests, 0)
			continue
		}
		number, rest, ok := decimal(v, power)
		if !ok { // more digits lost one that fewer gave
			return false
		}
		d := number - last
		c.raw = binary.AppendUvarint(c.raw, 1+(uint64(d)<<1^uint64(d>>63)))
		c.rests = append(c.rests, byte(rest))
		last = number
	}
	c.raw = append(c.raw, c.rests...)
	return len(c.raw) <= 8*len(values)
}

func readDecimals(dst []float64, raw []byte) string {
	if len(raw) < 1+len(dst) || raw[0] > mostDigits {
		return wrongLength
	}
	power := math.Pow10(int(raw[0]))
	rests, raw := raw[len(raw)-len(dst):], raw[1:len(raw)-len(dst)]
	var number int64
	for i := range dst {
		u, n := binary.Uvarint(raw)
		if n <= 0 {
			return wrongLength
		}
		raw = raw[n:]
		if u == 0 {
			dst[i] = math.NaN()
			continue
		}
		u--
		number += int64(u>>1) ^ -int64(u&1)
		dst[i] = math.Float64frombits(math.Float64bits(float64(number)/power) + uint64(int64(int8(rests[i]))))
	}
	if len(raw) > 0 {
		return wrongLength
	}
	return ""
}

// key gives bits an order that is that of the values.
func key(bits uint64) uint64 {
	if bits>>63 != 0 {
		return ^bits
	}
	return bits | 1<<63
}

// value is the inverse of key.
func value(key uint64) float64 {
	if key>>63 != 0 {
		return math.Float64frombits(key &^ (1 << 63))
	}
	return math.Float64frombits(^key)
}

// distinct writes the values to c.raw as places among the distinct ones. Readings
// are few distinct values, steps of a converter apart, whose bits look like noise. It
// gives false when that takes more than the values themselves.
func (c *Codec) distinct(values []float64) bool {
	c.keys = c.keys[:0]
	for _, v := range values {
		c.keys = append(c.keys, key(canonical(v)))
	}
	slices.Sort(c.keys)
	c.keys = slices.Compact(c.keys)
	c.bits = c.bits[:0]
	var last uint64
	for _, k := range c.keys {
		c.bits = append(c.bits, k-last)
		last = k
	}
	c.raw = c.transpose(binary.AppendUvarint(c.raw[:0], uint64(len(c.keys))))
	at := 0
	for _, v := range values {
		i, _ := slices.BinarySearch(c.keys, key(canonical(v)))
		c.raw = binary.AppendVarint(c.raw, int64(i-at))
		at = i
	}
	return len(c.raw) <= 8*len(values)
}

func (c *Codec) readDistinct(dst []float64, raw []byte) string {
	count, n := binary.Uvarint(raw)
	if n <= 0 || count > uint64(len(dst)) || uint64(len(raw)-n) < 8*count {
		return wrongLength
	}
	planes, raw := raw[n:n+8*int(count)], raw[n+8*int(count):]
	c.keys = c.keys[:0]
	var last uint64
	for i := range int(count) {
		last += plane(planes, int(count), i)
		c.keys = append(c.keys, last)
	}
	at := int64(0)
	for i := range dst {
		d, n := binary.Varint(raw)
		at += d
		if n <= 0 || at < 0 || at >= int64(count) {
			return wrongLength
		}
		raw = raw[n:]
		dst[i] = value(c.keys[at])
	}
	if len(raw) > 0 {
		return wrongLength
	}
	return ""
}

// plane gives the i-th of n byte-transposed values.
func plane(raw []byte, n, i int) uint64 {
	return uint64(raw[i]) | uint64(raw[n+i])<<8 | uint64(raw[2*n+i])<<16 | uint64(raw[3*n+i])<<24 |
		uint64(raw[4*n+i])<<32 | uint64(raw[5*n+i])<<40 | uint64(raw[6*n+i])<<48 | uint64(raw[7*n+i])<<56
}

// transpose appends c.bits to dst, all lowest bytes first.
func (c *Codec) transpose(dst []byte) []byte {
	n, from := len(c.bits), len(dst)
	dst = slices.Grow(dst, 8*n)[:from+8*n]
	for p := range 8 {
		to := dst[from+p*n : from+(p+1)*n]
		for i, bits := range c.bits {
			to[i] = byte(bits >> (8 * p))
		}
	}
	return dst
}

func (c *Codec) readFloats(dst []float64, blocks []byte, b *block) string {
	raw, what := c.open(blocks, b, 8*len(dst))
	n := len(dst)
	switch enc := b.encoding &^ flagZstd; {
	case what != "":
		return what
	case enc == encCodes:
		return readCodes(dst, raw, b.scale)
	case enc == encDecimals:
		return readDecimals(dst, raw)
	case enc == encDistinct:
		return c.readDistinct(dst, raw)
	case enc == encConstant && len(raw) == 8:
		v := math.Float64frombits(binary.LittleEndian.Uint64(raw))
		for i := range dst {
			dst[i] = v
		}
	case (enc == encPlanes || enc == encXOR) && len(raw) == 8*n:
		var last uint64
		for i := range dst {
			bits := plane(raw, n, i)
			if enc == encXOR {
				bits ^= last
			}
			v := math.Float64frombits(bits)
			if v == v {
				last = bits
			}
			dst[i] = v
		}
	default:
		return wrongLength
	}
	return ""
}

func readCodes(dst []float64, raw []byte, scale float64) string {
	var code int64
	for i := range dst {
		u, n := binary.Uvarint(raw)
		if n <= 0 {
			return wrongLength
		}
		raw = raw[n:]
		if u == 0 {
			dst[i] = math.NaN()
			continue
		}
		u--
		code += int64(u>>1) ^ -int64(u&1)
		dst[i] = float64(code) * scale
	}
	if len(raw) > 0 {
		return wrongLength
	}
	return ""
}
