// Package archive packs scans and operating points into chunks of columns, without
// loss and small, and thins columns for plots.
//
// A Chunk holds the times of its rows and named columns of float64 (NaN = missing)
// or bytes (states, qualities). A Codec turns it into bytes and back. Values return
// bit for bit, but every NaN returns as the one NaN of math.NaN. Some columns can be
// read without unpacking the others, and the head alone tells the extent of each.
// The bytes are the same for the same chunk in one build; another version of the
// compressor may find other bytes that mean the same.
//
// # Format, version 2
//
// Integers are little-endian of the width given, uvarint, or varint (zig-zag), both
// as in encoding/binary. Float64 are their IEEE 754 bits as u64.
//
//	"twa" u8 version = 2; 1 is read too, it has encodings to 6
//	u64 xxhash64 of the directory
//	u32 length of the directory in bytes
//	directory
//	blocks: times, then the columns in the order of the directory
//
//	directory:
//	  uvarint rows, 1 … 1 000 000
//	  varint  first time, varint last time, ns UTC
//	  uvarint number of columns
//	  block of the times
//	  per column: uvarint length and bytes of name, u8 kind (1 float64, 2 byte),
//	              u64 min, u64 max (float64, without missing values; NaN: all missing),
//	              uvarint missing values, block
//	  block: u8 encoding (bit 7: the bytes are a zstd frame [RFC 8878]),
//	         uvarint length, u64 xxhash64 of the bytes,
//	         u64 scale (float64; encoding 3 only)
//
//	encodings of a block, after decompression:
//	  1 times     varint first time, then varint differences of differences
//	              (difference before the first = 0)
//	  2 constant  one value, u64 or one byte, for all rows
//	  3 codes     per row: uvarint 0 = missing, or 1 + zig-zag (code − previous code);
//	              value = code · scale; a missing row leaves the previous code
//	  4 planes    u64 of every value, byte-transposed: all lowest bytes first
//	  5 xor       as 4, of u64 XOR u64 of the last value that is not NaN (first: 0)
//	  6 bytes     as they are
//	  7 distinct  uvarint number of distinct values, then these in rising order, then per
//	              row varint (index − previous index), index from 0. The distinct values
//	              are u64 differences (of 0 at first), byte-transposed as in 4, of keys that
//	              rise with the value: bits of the float64, all flipped when the sign bit
//	              is set, else the sign bit alone
//	  8 decimals  u8 digits; per row uvarint 0 = missing, or 1 + zig-zag (number − previous
//	              number), a missing row leaving the previous one; then per row i8 rest;
//	              value = number / 10^digits, moved by rest units in the last place
//
// A reader refuses what its limits do not allow before it allocates: MaxRows,
// MaxCells, and lengths that the bytes at hand do not cover.
package archive

import (
	"errors"
	"fmt"
	"math"
)

// Kind is what a column holds. The zero value is invalid.
type Kind uint8

// The kinds of column.
const (
	KindInvalid Kind = iota
	KindFloat        // Column.Float
	KindByte         // Column.Byte
)

// Limits of a chunk, for writer and reader alike.
const (
	MaxRows  = 1_000_000 // rows
	MaxCells = 1 << 24   // rows × columns: 128 MiB when unpacked
	MaxName  = 255       // bytes in the name of a column
)

// Column is one named column of a chunk. One of Float and Byte, after Kind, has
// the length of Chunk.Times.
type Column struct {
	Name  string
	Kind  Kind
	Float []float64 // NaN where missing
	Byte  []byte

	// Scale is the step of the values, for a writer only: the value of one code of
	// the converter. Where every value is a whole multiple, code · Scale in float64
	// arithmetic, codes are stored, which takes a quarter of the space. 0: no step.
	Scale float64
}

// Chunk is a table of rows. Times are in ns UTC and should rise.
type Chunk struct {
	Times   []int64
	Columns []Column
}

// Head is what a chunk tells without being unpacked.
type Head struct {
	Rows    int
	First   int64 // time of the first row, ns UTC
	Last    int64 // time of the last row, ns UTC
	Columns []Entry

	times  block
	blocks int // where the blocks begin
}

// Entry describes a column in a Head.
type Entry struct {
	Name    string
	Kind    Kind
	Min     float64 // least value that is not missing; NaN when all are
	Max     float64 // largest one
	Missing int     // rows that are missing; 0 for bytes
	block
}

// Size is the number of bytes that the column takes in the chunk.
func (e *Entry) Size() int { return e.length }

// ErrVersion is returned for a chunk written in a version that is not known.
var ErrVersion = errors.New("archive: chunk has an unknown version; read it with a newer build")

// ErrCorrupt is what every CorruptError is [errors.Is].
var ErrCorrupt = errors.New("chunk is damaged")

// CorruptError tells where a chunk is damaged. Columns that are not named in it
// can still be read by asking for them alone.
type CorruptError struct {
	Column string // "" for the head, "t" for the times
	What   string
}

// Error gives the column and what is wrong there.
func (e *CorruptError) Error() string {
	where := "head"
	if e.Column != "" {
		where = fmt.Sprintf("column %q", e.Column)
	}
	return "archive: " + where + ": " + e.What + ": " + ErrCorrupt.Error()
}

// Is makes every CorruptError an ErrCorrupt.
func (e *CorruptError) Is(target error) bool { return target == ErrCorrupt }

// timesName names the times in a CorruptError.
const timesName = "t"

// check refuses a chunk that breaks the rules for writers.
func (c *Chunk) check() error {
	rows := len(c.Times)
	if rows == 0 || rows > MaxRows || rows*len(c.Columns) > MaxCells {
		return fmt.Errorf("archive: chunk of %d rows and %d columns is outside 1 … %d rows, %d cells", rows, len(c.Columns), MaxRows, MaxCells)
	}
	seen := make(map[string]bool, len(c.Columns))
	for i := range c.Columns {
		col := &c.Columns[i]
		if col.Name == "" || len(col.Name) > MaxName || seen[col.Name] {
			return fmt.Errorf("archive: column %d: name %q is empty, too long or used twice", i, col.Name)
		}
		seen[col.Name] = true
		n := -1
		switch col.Kind {
		case KindFloat:
			n = len(col.Float)
		case KindByte:
			n = len(col.Byte)
		case KindInvalid:
		}
		if n != rows {
			return fmt.Errorf("archive: column %q has %d values of kind %d for %d rows", col.Name, n, col.Kind, rows)
		}
	}
	return nil
}

// extent gives min and max of the values that are not NaN, and the number of NaN.
func extent(values []float64) (lo, hi float64, missing int) {
	lo, hi = math.NaN(), math.NaN()
	for _, v := range values {
		switch {
		case v != v:
			missing++
		case lo != lo:
			lo, hi = v, v
		case v < lo:
			lo = v
		case v > hi:
			hi = v
		}
	}
	return lo, hi, missing
}
