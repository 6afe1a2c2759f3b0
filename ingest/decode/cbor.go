package decode

import (
	"encoding/binary"
	"errors"
	"math"
	"strconv"

	"github.com/fxamacker/cbor/v2"

	"throatwatch/ingest"
)

// CBOR major types and the simple values used here [RFC 8949 3].
const (
	cborUint   = 0
	cborNegint = 1
	cborText   = 3
	cborArray  = 4
	cborMap    = 5
	cborTag    = 6
	cborSimple = 7

	cborIndefinite = 31
	cborBreak      = 0xff
)

// senmlCBOR decodes a SenML pack in CBOR [RFC 8428 6]. The library proves that the
// payload is well-formed and within the limits; after that it can be walked over in
// place, without the allocations of decoding into Go values.
func (d *Decoder) senmlCBOR(payload []byte) {
	if err := d.syntax.Wellformed(payload); err != nil {
		reason := ingest.ReasonSyntax
		if tooMany := (*cbor.MaxArrayElementsError)(nil); errors.As(err, &tooMany) {
			reason = ingest.ReasonTooLarge
		}
		d.refuse(reason, 0, -1, "payload is not well-formed or over a limit", err)
		return
	}
	d.base = base{t: ingest.NoTime}
	w := walker{b: payload}
	pack := w.head()
	if pack.major != cborArray {
		d.refuse(ingest.ReasonSyntax, 0, 0, "a SenML pack is an array of records", nil)
		return
	}
	for i := 0; w.more(&pack) && !d.res.Refused; {
		if i == d.limits.Records {
			d.refuse(ingest.ReasonTooLarge, i+1, w.i, "too many records", nil)
			return
		}
		i++
		at := w.i
		var r record
		fields := w.head()
		if fields.major != cborMap {
			d.refuse(ingest.ReasonSyntax, i, at, "a SenML record is a map", nil)
			return
		}
		for w.more(&fields) && !d.res.Refused {
			l := w.label()
			valueAt := w.i
			if reason := d.cborField(&w, &r, l); reason != ingest.ReasonNone {
				d.wrong(&r, l, reason, i, valueAt)
			}
		}
		if !d.res.Refused {
			d.resolve(&r, i, at)
		}
	}
}

// cborField reads the value of a label into r.
func (d *Decoder) cborField(w *walker, r *record, l label) ingest.Reason {
	r.mark(l)
	if p := r.number(l); p != nil {
		v, ok := d.cborNumber(w)
		switch {
		case !ok:
			return ingest.ReasonNotNumber
		case math.IsNaN(v) || math.IsInf(v, 0):
			return ingest.ReasonNotFinite
		}
		*p = v
		return ingest.ReasonNone
	}
	if p := r.text(l); p != nil {
		text, ok := w.text()
		if !ok {
			return ingest.ReasonSyntax
		}
		*p = text
		return ingest.ReasonNone
	}
	w.skip()
	if l == labelMust {
		return ingest.ReasonMustUnderstand
	}
	return ingest.ReasonNone
}

// cborNumber reads an integer, a float of any width or a decimal fraction, which
// RFC 8428 6 allows. Another item is passed over and gives false.
func (d *Decoder) cborNumber(w *walker) (float64, bool) {
	start := *w
	h := w.head()
	switch {
	case h.major == cborUint:
		return float64(h.arg), true
	case h.major == cborNegint && h.arg == math.MaxUint64:
		return -0x1p64, true
	case h.major == cborNegint: // −1 − arg, rounded once
		return -float64(h.arg + 1), true
	case h.major == cborSimple && h.info == 25:
		return half(uint16(h.arg)), true
	case h.major == cborSimple && h.info == 26:
		return float64(math.Float32frombits(uint32(h.arg))), true
	case h.major == cborSimple && h.info == 27:
		return math.Float64frombits(h.arg), true
	case h.major == cborTag && h.arg == 4: // [exponent, mantissa] [RFC 8949 3.4.4]
		pair := w.head()
		if pair.major == cborArray && pair.info != cborIndefinite && pair.arg == 2 {
			exponent, mantissa := w.head(), w.head()
			if exponent.major <= cborNegint && mantissa.major <= cborNegint {
				return decimalFraction(exponent, mantissa), true
			}
		}
	}
	*w = start
	w.skip()
	return 0, false
}

// decimalFraction gives mantissa · 10^exponent, correctly rounded, for integers.
func decimalFraction(exponent, mantissa item) float64 {
	var buf [48]byte
	b := buf[:0]
	switch {
	case mantissa.major == cborUint:
		b = strconv.AppendUint(b, mantissa.arg, 10)
	case mantissa.arg == math.MaxUint64: // −2^64 does not fit
		b = append(b, "-18446744073709551616"...)
	default:
		b = strconv.AppendUint(append(b, '-'), mantissa.arg+1, 10)
	}
	b = append(b, 'e')
	if exponent.major == cborNegint {
		b = append(b, '-') // −1 − arg: one more is added below
	}
	b = strconv.AppendUint(b, min(exponent.arg, 9999)+uint64(exponent.major), 10)
	v, err := strconv.ParseFloat(string(b), 64)
	if err != nil && !errors.Is(err, strconv.ErrRange) {
		return math.NaN()
	}
	return v
}

// half converts an IEEE 754 binary16.
func half(bits uint16) float64 {
	mantissa := float64(bits & 0x3ff)
	exponent := int(bits>>10) & 0x1f
	var v float64
	switch exponent {
	case 0:
		v = math.Ldexp(mantissa, -24)
	case 31:
		if v = math.Inf(1); mantissa != 0 {
			v = math.NaN()
		}
	default:
		v = math.Ldexp(mantissa+1024, exponent-25)
	}
	if bits>>15 != 0 {
		return -v
	}
	return v
}

// item is the head of a CBOR data item.
type item struct {
	major, info byte
	arg         uint64
}

// walker walks over bytes that are known to be well-formed CBOR.
type walker struct {
	b []byte
	i int
}

// head reads the head of the next item.
func (w *walker) head() item {
	h := item{major: w.b[w.i] >> 5, info: w.b[w.i] & 31}
	w.i++
	rest := w.b[w.i:]
	switch h.info {
	default:
		h.arg = uint64(h.info)
	case 24:
		h.arg = uint64(rest[0])
		w.i++
	case 25:
		h.arg = uint64(binary.BigEndian.Uint16(rest))
		w.i += 2
	case 26:
		h.arg = uint64(binary.BigEndian.Uint32(rest))
		w.i += 4
	case 27:
		h.arg = binary.BigEndian.Uint64(rest)
		w.i += 8
	case cborIndefinite:
	}
	return h
}

// more tells whether an array or map has another element or pair, and counts it.
func (w *walker) more(h *item) bool {
	if h.info == cborIndefinite {
		if w.b[w.i] == cborBreak {
			w.i++
			return false
		}
		return true
	}
	if h.arg == 0 {
		return false
	}
	h.arg--
	return true
}

// text reads a text of definite length [RFC 8428 6]; it aliases the payload.
// Another item is passed over and gives false.
func (w *walker) text() ([]byte, bool) {
	start := *w
	h := w.head()
	if h.major != cborText || h.info == cborIndefinite {
		*w = start
		w.skip()
		return nil, false
	}
	end := w.i + int(h.arg)
	text := w.b[w.i:end:end]
	w.i = end
	return text, true
}

// label reads the key of a map: a number for SenML's own, text for others.
func (w *walker) label() label {
	start := *w
	h := w.head()
	switch {
	case h.major == cborUint && h.arg <= uint64(labelData):
		return label(h.arg)
	case h.major == cborNegint && h.arg < uint64(-labelBaseSum):
		return -1 - label(h.arg)
	}
	*w = start
	if text, ok := w.text(); ok {
		return textLabel(text)
	}
	return labelUnknown
}

// skip passes over the next item and all in it. The depth is bounded by the check
// for well-formedness.
func (w *walker) skip() {
	h := w.head()
	switch h.major {
	case cborArray:
		for w.more(&h) {
			w.skip()
		}
	case cborMap:
		for w.more(&h) {
			w.skip()
			w.skip()
		}
	case cborTag:
		w.skip()
	case cborUint, cborNegint, cborSimple:
	default: // text or bytes
		if h.info != cborIndefinite {
			w.i += int(h.arg)
			return
		}
		for w.more(&h) {
			w.skip()
		}
	}
}
