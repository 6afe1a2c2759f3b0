package archive

import (
	"encoding/binary"
	"math"

	"github.com/cespare/xxhash/v2"
)

const (
	magic      = "twa"
	version    = 2
	oldest     = 1                      // version that is read
	headLength = len(magic) + 1 + 8 + 4 // before the directory
)

// encoding says how the values of a block became bytes.
type encoding uint8

const (
	encTimes encoding = 1 + iota
	encConstant
	encCodes
	encPlanes
	encXOR
	encBytes
	encDistinct
	encDecimals

	flagZstd encoding = 0x80
)

// block is the directory's account of one column of bytes.
type block struct {
	encoding encoding
	offset   int // from the start of the blocks; not stored, the sum of the lengths before
	length   int
	sum      uint64 // xxhash64
	scale    float64
}

func (b *block) append(dst []byte) []byte {
	dst = append(dst, byte(b.encoding))
	dst = binary.AppendUvarint(dst, uint64(b.length))
	dst = binary.LittleEndian.AppendUint64(dst, b.sum)
	if b.encoding&^flagZstd == encCodes {
		dst = appendFloat(dst, b.scale)
	}
	return dst
}

func appendFloat(dst []byte, v float64) []byte {
	return binary.LittleEndian.AppendUint64(dst, math.Float64bits(v))
}

// append writes head and directory; the blocks follow it.
func (h *Head) append(dst []byte) []byte {
	dst = append(dst, magic...)
	dst = append(dst, version)
	at := len(dst)
	dst = append(dst, make([]byte, 8+4)...)
	start := len(dst)
	dst = binary.AppendUvarint(dst, uint64(h.Rows))
	dst = binary.AppendVarint(dst, h.First)
	dst = binary.AppendVarint(dst, h.Last)
	dst = binary.AppendUvarint(dst, uint64(len(h.Columns)))
	dst = h.times.append(dst)
	for i := range h.Columns {
		e := &h.Columns[i]
		dst = binary.AppendUvarint(dst, uint64(len(e.Name)))
		dst = append(dst, e.Name...)
		dst = append(dst, byte(e.Kind))
		dst = appendFloat(appendFloat(dst, e.Min), e.Max)
		dst = binary.AppendUvarint(dst, uint64(e.Missing))
		dst = e.append(dst)
	}
	binary.LittleEndian.PutUint64(dst[at:], xxhash.Sum64(dst[start:]))
	binary.LittleEndian.PutUint32(dst[at+8:], uint32(len(dst)-start))
	return dst
}

// ReadHead reads the head of a chunk. It returns ErrVersion or a *CorruptError. The
// blocks are not looked at, except that they must be there to their last byte.
func ReadHead(src []byte) (Head, error) {
	bad := func(what string) (Head, error) { return Head{}, &CorruptError{What: what} }
	if len(src) < headLength || string(src[:len(magic)]) != magic {
		return bad("not a chunk")
	}
	if v := src[len(magic)]; v < oldest || v > version {
		return Head{}, ErrVersion
	}
	sum := binary.LittleEndian.Uint64(src[len(magic)+1:])
	size := uint64(binary.LittleEndian.Uint32(src[len(magic)+9:]))
	if size > uint64(len(src)-headLength) {
		return bad("directory is cut")
	}
	r := reader{b: src[headLength : headLength+int(size)]}
	if xxhash.Sum64(r.b) != sum {
		return bad("checksum of the directory")
	}
	h := Head{blocks: headLength + int(size)}
	h.Rows = r.length(MaxRows)
	h.First, h.Last = r.varint(), r.varint()
	columns := r.length(min(MaxCells/max(h.Rows, 1), len(r.b)/leastEntry))
	end := uint64(0)
	r.block(&h.times, &end)
	h.Columns = make([]Entry, columns)
	for i := range h.Columns {
		e := &h.Columns[i]
		e.Name = string(r.bytes(r.length(MaxName)))
		e.Kind = Kind(r.byte())
		e.Min, e.Max = r.float(), r.float()
		e.Missing = r.length(h.Rows)
		r.block(&e.block, &end)
		if e.Kind != KindFloat && e.Kind != KindByte {
			r.bad = true
		}
	}
	switch {
	case r.bad || len(r.b) > 0 || h.Rows == 0:
		return bad("directory makes no sense")
	case end != uint64(len(src)-h.blocks):
		return bad("blocks are cut or too long")
	}
	return h, nil
}

// leastEntry is the least number of bytes of a column in the directory.
const leastEntry = 1 + 1 + 8 + 8 + 1 + 1 + 1 + 8

// reader takes the directory apart. After the first error it gives zeros.
type reader struct {
	b   []byte
	bad bool
}

func (r *reader) bytes(n int) []byte {
	if r.bad || n > len(r.b) {
		r.bad, r.b = true, nil
		return nil
	}
	b := r.b[:n]
	r.b = r.b[n:]
	return b
}

func (r *reader) byte() byte {
	if b := r.bytes(1); b != nil {
		return b[0]
	}
	return 0
}

func (r *reader) u64() uint64 {
	if b := r.bytes(8); b != nil {
		return binary.LittleEndian.Uint64(b)
	}
	return 0
}

func (r *reader) float() float64 { return math.Float64frombits(r.u64()) }

func (r *reader) varint() int64 {
	v, n := binary.Varint(r.b)
	if n <= 0 {
		r.bad, n = true, 0
	}
	r.b = r.b[n:]
	return v
}

// length reads a number that must not be over most.
func (r *reader) length(most int) int {
	v, n := binary.Uvarint(r.b)
	if n <= 0 || v > uint64(max(most, 0)) {
		r.bad, v, n = true, 0, 0
	}
	r.b = r.b[n:]
	return int(v)
}

// block reads the account of a block that begins at *end, and moves *end behind it.
func (r *reader) block(b *block, end *uint64) {
	b.encoding = encoding(r.byte())
	b.offset = int(*end)
	b.length = r.length(math.MaxInt32)
	*end += uint64(b.length)
	b.sum = r.u64()
	if b.encoding&^flagZstd == encCodes {
		b.scale = r.float()
	}
}
