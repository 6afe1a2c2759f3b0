// Package decode turns MQTT payloads into samples.
//
// Four formats are known: SenML packs [RFC 8428] as JSON and as CBOR, InfluxDB
// line protocol, and a bare value per topic. A Decoder promises:
//
//   - every sample it gives is finite; NaN and infinity end here;
//   - bad input is data, never an error: what was not used is counted by reason
//     in Result.Faults and the first of it is described in Result.Fault;
//   - a part that is bad costs that part only (a record, a field, a line) as
//     long as the rest can be understood without it. A message whose syntax is
//     broken, or whose base fields are, gives no sample at all;
//   - time and memory are bounded by Limits and linear in the payload;
//   - nothing is allocated per message once the buffers have grown (line
//     protocol: one small object per message, inside its library).
//
// Units and times are passed on as the sender meant them. Whether a unit fits
// its channel and whether a clock can be believed is judged later.
package decode

import (
	"bytes"
	"fmt"
	"math"
	"strconv"

	"github.com/fxamacker/cbor/v2"

	"throatwatch/ingest"
)

// Format names the encoding of a payload. The zero value is invalid.
type Format uint8

// The formats.
const (
	FormatInvalid Format = iota
	SenMLJSON            // RFC 8428 pack, JSON
	SenMLCBOR            // RFC 8428 pack, CBOR
	Lines                // InfluxDB line protocol
	Value                // bare number, or {"t", "v", "u"}; the topic names the channel
	numFormats
)

var formatNames = [numFormats]string{"invalid", "senml", "senml-cbor", "lines", "value"}

// String gives the format as a rig file writes it.
func (f Format) String() string {
	if f < numFormats {
		return formatNames[f]
	}
	return formatNames[FormatInvalid]
}

// ParseFormat is the inverse of String: senml, senml-cbor, lines or value.
func ParseFormat(s string) (Format, error) {
	for f := SenMLJSON; f < numFormats; f++ {
		if formatNames[f] == s {
			return f, nil
		}
	}
	return FormatInvalid, fmt.Errorf("decode: format %q is unknown; use senml, senml-cbor, lines or value", s)
}

// Limits bound what one message may cost. Zero fields take the default.
type Limits struct {
	Payload int // bytes in a payload; default 256 KiB
	Records int // SenML records, or line protocol fields, in a payload; default 4096
}

// MaxName is the longest name of a sample in bytes. With Limits.Records it
// bounds what a long base name can be made to cost.
const MaxName = 256

// maxDepth bounds nested arrays and objects. SenML itself needs two levels.
const maxDepth = 16

// Faults counts, by reason, the parts of a message that gave no sample.
type Faults [ingest.NumReasons]uint32

// Total is the number of faults of all reasons.
func (f *Faults) Total() uint32 {
	var n uint32
	for _, c := range f {
		n += c
	}
	return n
}

// Fault tells why a message, or a part of it, was not used.
type Fault struct {
	Reason ingest.Reason
	Record int    // record, or line, counted from 1; 0 when it concerns none
	Offset int    // byte offset in the payload; −1 when not known
	What   string // what was found, or what was due
	Cause  error  // the error of a library; nil for most
}

// Error gives the fault as one line, as the quarantine list shows it.
func (f *Fault) Error() string {
	b := append([]byte("decode: "), f.Reason.String()...)
	if f.Record > 0 {
		b = strconv.AppendInt(append(b, ", record "...), int64(f.Record), 10)
	}
	if f.Offset >= 0 {
		b = strconv.AppendInt(append(b, ", byte "...), int64(f.Offset), 10)
	}
	b = append(append(b, ": "...), f.What...)
	if f.Cause != nil {
		text := f.Cause.Error() // may quote the payload at length
		b = append(append(b, ": "...), text[:min(len(text), 200)]...)
	}
	return string(b)
}

// Unwrap gives the error of the library, if there is one.
func (f *Fault) Unwrap() error { return f.Cause }

// Result is what one message held. All of it is valid until the next call of
// Decode: samples alias the payload or buffers of the Decoder.
type Result struct {
	Samples []ingest.Sample
	Faults  Faults
	Fault   *Fault // the first fault; nil when there is none
	Refused bool   // no sample, and more than a missing number: for the quarantine

	// DeviceTime tells that there are samples and each has an absolute time of
	// its sender. Only then do equal payloads mean a copy of one message: a time
	// relative to now, or none, makes equal payloads out of different readings.
	DeviceTime bool
}

// Decoder decodes messages, one at a time. It keeps its buffers between calls
// and belongs to one goroutine.
type Decoder struct {
	limits Limits
	syntax cbor.DecMode // its check for well-formed CBOR, with our limits

	res   Result
	fault Fault
	host  int64
	names []byte // names that had to be put together, unescaped strings

	base base // SenML base fields in force
}

// New gives a decoder with the given limits.
func New(limits Limits) *Decoder {
	if limits.Payload <= 0 {
		limits.Payload = 256 << 10
	}
	if limits.Records <= 0 {
		limits.Records = 4096
	}
	mode, err := cbor.DecOptions{
		MaxNestedLevels:  maxDepth,
		MaxArrayElements: max(limits.Records, 16), // the library's least
		MaxMapPairs:      64,
	}.DecMode()
	if err != nil {
		panic("decode: options of the CBOR library: " + err.Error())
	}
	return &Decoder{limits: limits, syntax: mode}
}

// Decode decodes one message. Host, in ns UTC, is the instant that SenML's
// relative times refer to; of the topic only the last level matters, and only
// for FormatValue. The payload must stay as it is as long as the samples are used.
func (d *Decoder) Decode(format Format, topic string, payload []byte, host int64) *Result {
	d.res = Result{Samples: d.res.Samples[:0], DeviceTime: true}
	d.host = host
	d.names = d.names[:0]
	switch {
	case len(payload) > d.limits.Payload:
		d.refuse(ingest.ReasonTooLarge, 0, d.limits.Payload, "payload is over the size limit", nil)
	case format == SenMLJSON:
		d.senmlJSON(payload)
	case format == SenMLCBOR:
		d.senmlCBOR(payload)
	case format == Lines:
		d.lines(payload)
	case format == Value:
		d.value(topic, payload)
	default:
		d.refuse(ingest.ReasonSyntax, 0, -1, "no format is given for this topic", nil)
	}
	if len(d.res.Samples) == 0 {
		d.res.DeviceTime = false
		d.res.Refused = d.res.Refused || d.res.Faults[ingest.ReasonSyntax] > 0
	}
	return &d.res
}

// note counts a part of the message that is not used, and keeps the first.
func (d *Decoder) note(reason ingest.Reason, rec, offset int, what string, cause error) {
	d.res.Faults[reason]++
	if d.res.Fault == nil {
		d.fault = Fault{Reason: reason, Record: rec, Offset: offset, What: what, Cause: cause}
		d.res.Fault = &d.fault
	}
}

// refuse gives up the whole message: what was found in it before does not count.
func (d *Decoder) refuse(reason ingest.Reason, rec, offset int, what string, cause error) {
	d.res = Result{Samples: d.res.Samples[:0], Refused: true}
	d.note(reason, rec, offset, what, cause)
}

// add appends a sample; a time that is not the sender's own clears DeviceTime.
func (d *Decoder) add(name, unit []byte, t int64, own bool, v float64) {
	d.res.Samples = append(d.res.Samples, ingest.Sample{Name: name, Unit: unit, Time: t, Value: v})
	d.res.DeviceTime = d.res.DeviceTime && own
}

// keep puts the parts together in the decoder's buffer.
func (d *Decoder) keep(parts ...[]byte) []byte {
	start := len(d.names)
	for _, p := range parts {
		d.names = append(d.names, p...)
	}
	return d.names[start:len(d.names):len(d.names)]
}

// nanos converts seconds to ns, rounded to the microsecond: a float64 of today's
// epoch seconds has a step of 0.24 µs, so the digits beyond are noise and would
// make copies of one sample look different. Times that int64 cannot hold are
// clamped: milliseconds sent as seconds become a time far ahead, which a later
// stage recognises as a wrong clock without losing the value.
func nanos(seconds float64) int64 {
	const most = (math.MaxInt64 - 1) / 1000 // µs; keeps clear of ingest.NoTime
	us := math.Round(seconds * 1e6)
	switch {
	case us >= most:
		return most * 1000
	case us <= -most:
		return -most * 1000
	}
	return int64(us) * 1000
}

// powers of ten that float64 holds exactly.
var tens = [...]float64{1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18}

// exact reads a decimal of at most 18 digits without an exponent from the start of
// b. Mantissa and power of ten are then exact in float64, so that one division
// rounds correctly [Clinger 1990, How to read floating point numbers accurately].
// It gives the bytes that it took, 0 when b starts with anything else: then number
// has to look at it.
func exact(b []byte) (v float64, n int) {
	i := 0
	if len(b) > 0 && b[0] == '-' {
		i = 1
	}
	first, point, m := i, -1, uint64(0)
	for ; i < len(b); i++ {
		if c := b[i] - '0'; c <= 9 {
			m = m*10 + uint64(c)
		} else if b[i] == '.' && point < 0 && i > first {
			point = i
		} else {
			break
		}
		if i-first > 18 {
			return 0, 0
		}
	}
	if i == first || point == i-1 || m > 1<<53 {
		return 0, 0
	}
	v = float64(m)
	if point >= 0 {
		v /= tens[i-1-point]
	}
	if first == 1 {
		v = -v
	}
	return v, i
}

// number parses a decimal number: digits, sign, point and exponent, correctly
// rounded. The words NaN and Inf, in any case, and numbers beyond float64 give
// ReasonNotFinite; everything else gives ReasonSyntax.
func number(b []byte) (float64, ingest.Reason) {
	for _, c := range b {
		if (c < '0' || c > '9') && c != '-' && c != '+' && c != '.' && c != 'e' && c != 'E' {
			word := bytes.TrimLeft(b, "+-")
			for _, w := range [...]string{"nan", "inf", "infinity"} {
				if bytes.EqualFold(word, []byte(w)) {
					return 0, ingest.ReasonNotFinite
				}
			}
			return 0, ingest.ReasonSyntax
		}
	}
	v, err := strconv.ParseFloat(string(b), 64)
	switch {
	case math.IsInf(v, 0):
		return 0, ingest.ReasonNotFinite
	case err != nil:
		return 0, ingest.ReasonSyntax
	}
	return v, ingest.ReasonNone
}
