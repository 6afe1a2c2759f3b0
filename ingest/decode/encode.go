package decode

import (
	"encoding/binary"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"github.com/influxdata/line-protocol/v2/lineprotocol"
)

// Reading is one value to be encoded.
type Reading struct {
	Name  string // appended to the base name; together a SenML name [RFC 8428 4.5.1]
	Unit  string // empty: none
	Value float64
}

// AppendSenMLJSON appends a SenML pack [RFC 8428 5] to dst: base name, base time t
// in ns UTC, cut to the microsecond, and the readings. Values come back bit for
// bit. JSON has no NaN and no infinity: such readings are left out.
func AppendSenMLJSON(dst []byte, baseName string, t int64, readings []Reading) []byte {
	dst = appendQuoted(append(dst, `[{"bn":`...), baseName)
	dst = appendSeconds(append(dst, `,"bt":`...), t)
	separator := ","
	for i := range readings {
		r := &readings[i]
		if math.IsNaN(r.Value) || math.IsInf(r.Value, 0) {
			continue
		}
		dst = appendQuoted(append(append(dst, separator...), `"n":`...), r.Name)
		if r.Unit != "" {
			dst = appendQuoted(append(dst, `,"u":`...), r.Unit)
		}
		dst = strconv.AppendFloat(append(dst, `,"v":`...), r.Value, 'g', -1, 64)
		separator = "},{"
	}
	return append(dst, "}]"...)
}

// AppendSenMLCBOR appends the same pack in CBOR [RFC 8428 6]. Values that a float32
// holds exactly are sent as one. Non-finite readings are sent as they are, as a
// data system with a dead probe would.
func AppendSenMLCBOR(dst []byte, baseName string, t int64, readings []Reading) []byte {
	dst = appendHead(dst, cborArray, uint64(max(1, len(readings))))
	for i := 0; i < max(1, len(readings)); i++ {
		var r *Reading
		pairs := 0
		if i == 0 {
			pairs += 2
		}
		if i < len(readings) {
			r = &readings[i]
			pairs += 2
			if r.Unit != "" {
				pairs++
			}
		}
		dst = appendHead(dst, cborMap, uint64(pairs))
		if i == 0 {
			dst = appendText(appendLabel(dst, labelBaseName), baseName)
			dst = appendFloat(appendLabel(dst, labelBaseTime), float64(t/1000)/1e6)
		}
		if r == nil {
			break
		}
		dst = appendText(appendLabel(dst, labelName), r.Name)
		if r.Unit != "" {
			dst = appendText(appendLabel(dst, labelUnit), r.Unit)
		}
		dst = appendFloat(appendLabel(dst, labelValue), r.Value)
	}
	return dst
}

// AppendLines appends line protocol with times in ns: a line per reading, its name
// the measurement and its value the field "value", so that name, value and time
// come back as they are. A reading without a finite value is left out. An error
// names a reading whose name no line can hold.
func AppendLines(dst []byte, t int64, readings []Reading) ([]byte, error) {
	var enc lineprotocol.Encoder
	enc.SetPrecision(lineprotocol.Nanosecond)
	enc.SetBuffer(dst)
	for i := range readings {
		r := &readings[i]
		v, ok := lineprotocol.FloatValue(r.Value)
		if !ok {
			continue
		}
		if strings.HasPrefix(r.Name, "#") { // a comment, to every reader
			return dst, fmt.Errorf("decode: line of %q: a line that begins with # is a comment", r.Name)
		}
		enc.StartLine(r.Name)
		enc.AddField("value", v)
		enc.EndLine(time.Unix(0, t))
		if err := enc.Err(); err != nil {
			return dst, fmt.Errorf("decode: line of %q: %w", r.Name, err)
		}
	}
	return enc.Bytes(), nil
}

// appendSeconds appends a time in ns as seconds with six decimals.
func appendSeconds(dst []byte, t int64) []byte {
	us := t / 1000
	if us < 0 {
		dst, us = append(dst, '-'), -us
	}
	dst = append(strconv.AppendInt(dst, us/1_000_000, 10), '.')
	for div := int64(100_000); div > 0; div /= 10 {
		dst = append(dst, byte('0'+us/div%10))
	}
	return dst
}

// appendQuoted appends s as a JSON string.
func appendQuoted(dst []byte, s string) []byte {
	const hex = "0123456789abcdef"
	dst = append(dst, '"')
	for i := range len(s) {
		switch c := s[i]; {
		case c == '"' || c == '\\':
			dst = append(dst, '\\', c)
		case c < ' ':
			dst = append(dst, `\u00`...)
			dst = append(dst, hex[c>>4], hex[c&15])
		default:
			dst = append(dst, c)
		}
	}
	return append(dst, '"')
}

// appendHead appends the head of a CBOR item.
func appendHead(dst []byte, major byte, arg uint64) []byte {
	switch {
	case arg < 24:
		return append(dst, major<<5|byte(arg))
	case arg <= math.MaxUint8:
		return append(dst, major<<5|24, byte(arg))
	case arg <= math.MaxUint16:
		return binary.BigEndian.AppendUint16(append(dst, major<<5|25), uint16(arg))
	case arg <= math.MaxUint32:
		return binary.BigEndian.AppendUint32(append(dst, major<<5|26), uint32(arg))
	}
	return binary.BigEndian.AppendUint64(append(dst, major<<5|27), arg)
}

func appendLabel(dst []byte, l label) []byte {
	if l < 0 {
		return appendHead(dst, cborNegint, uint64(-1-l))
	}
	return appendHead(dst, cborUint, uint64(l))
}

func appendText(dst []byte, s string) []byte {
	return append(appendHead(dst, cborText, uint64(len(s))), s...)
}

func appendFloat(dst []byte, v float64) []byte {
	if f := float32(v); float64(f) == v {
		return binary.BigEndian.AppendUint32(append(dst, cborSimple<<5|26), math.Float32bits(f))
	}
	return binary.BigEndian.AppendUint64(append(dst, cborSimple<<5|27), math.Float64bits(v))
}
