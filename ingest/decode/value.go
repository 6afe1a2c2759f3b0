package decode

import (
	"bytes"
	"math"
	"strings"
	"time"

	"throatwatch/ingest"
)

// value decodes a payload that holds one value: a bare number, or an object with
// "v", and, if the sender likes, "t" (RFC 3339, or seconds since 1970 UTC with a
// fraction) and "u". The last level of the topic is the name.
func (d *Decoder) value(topic string, payload []byte) {
	topic = topic[strings.LastIndexByte(topic, '/')+1:]
	if topic == "" || len(topic) > MaxName {
		d.refuse(ingest.ReasonSyntax, 0, -1, "last level of the topic is empty or too long for a name", nil)
		return
	}
	d.names = append(d.names, topic...)
	name := d.names[:len(topic):len(topic)]

	body := bytes.TrimSpace(payload)
	switch {
	case len(body) > 0 && body[0] == '{':
		d.valueObject(name, payload)
		return
	case string(body) == "true", string(body) == "false", string(body) == "null", len(body) > 0 && body[0] == '"':
		d.note(ingest.ReasonNotNumber, 0, 0, "text, boolean or null", nil)
		return
	}
	v, reason := number(body)
	switch {
	case reason == ingest.ReasonSyntax && bytes.IndexByte(body, ',') >= 0:
		d.refuse(reason, 0, bytes.IndexByte(payload, ','), "not a number; write the fraction with a point", nil)
	case reason != ingest.ReasonNone:
		d.note(reason, 0, 0, "not a finite number", nil)
	default:
		d.add(name, nil, ingest.NoTime, false, v)
	}
}

// valueObject decodes the object form of value.
func (d *Decoder) valueObject(name, payload []byte) {
	var (
		v, seconds   float64
		stamp, unit  []byte
		hasV, hasT   bool
		vErr, tErr   ingest.Reason
		vWhere, tLoc int
	)
	s := scanner{b: payload, d: d}
	s.expect('{', "a number or an object is due")
	for k := 0; s.next('}', k); k++ {
		key := s.text()
		s.expect(':', `":" is due after a label`)
		text := s.peek() == '"'
		switch {
		case string(key) == "v":
			hasV, vWhere = true, s.i
			v, vErr = s.number()
		case string(key) == "t" && text:
			hasT, tLoc = true, s.i
			stamp, tErr = s.text(), ingest.ReasonNone
		case string(key) == "t":
			hasT, tLoc = true, s.i
			seconds, tErr = s.number()
			stamp = nil
		case string(key) == "u" && text:
			unit = s.text()
		default:
			s.skip(0)
		}
	}
	s.end()
	switch {
	case s.what != "":
		d.refuse(ingest.ReasonSyntax, 0, s.at, s.what, nil)
		return
	case !hasV:
		d.refuse(ingest.ReasonSyntax, 0, -1, `object has no "v"`, nil)
		return
	case vErr != ingest.ReasonNone:
		d.note(vErr, 0, vWhere, `"v" is not a finite number`, nil)
		return
	case tErr != ingest.ReasonNone:
		d.refuse(ingest.ReasonSyntax, 0, tLoc, `"t" is neither RFC 3339 text nor seconds`, nil)
		return
	}
	t := ingest.NoTime
	switch {
	case stamp != nil:
		at, err := time.Parse(time.RFC3339Nano, string(stamp))
		if err != nil {
			d.refuse(ingest.ReasonSyntax, 0, tLoc, `"t" is not a time after RFC 3339`, err)
			return
		}
		t = unixNano(at)
	case hasT:
		t = nanos(seconds)
	}
	d.add(name, unit, t, t != ingest.NoTime, v)
}

// unixNano is Time.UnixNano for every year: beyond int64 it is clamped as nanos
// clamps.
func unixNano(t time.Time) int64 {
	switch s := t.Unix(); {
	case s > math.MaxInt64/1_000_000_000-1:
		return nanos(math.Inf(1))
	case s < math.MinInt64/1_000_000_000+1:
		return nanos(math.Inf(-1))
	}
	return t.UnixNano()
}
