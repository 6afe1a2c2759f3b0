package decode

import (
	"unicode/utf16"
	"unicode/utf8"

	"throatwatch/ingest"
)

// senmlJSON decodes a SenML pack in JSON [RFC 8428 5].
func (d *Decoder) senmlJSON(payload []byte) {
	d.base = base{t: ingest.NoTime}
	s := scanner{b: payload, d: d}
	s.expect('[', "a SenML pack is an array of records")
	i := 0
	for s.next(']', i) && !d.res.Refused {
		if i == d.limits.Records {
			d.refuse(ingest.ReasonTooLarge, i+1, s.i, "too many records", nil)
			return
		}
		i++
		at := s.i
		var r record
		if !s.plain(&r) {
			r = record{}
			s.expect('{', "a SenML record is an object")
			for k := 0; s.next('}', k) && !d.res.Refused; k++ {
				s.field(&r, s.label(), i)
			}
		}
		if s.what == "" && !d.res.Refused {
			d.resolve(&r, i, at)
		}
	}
	if d.res.Refused {
		return
	}
	s.end()
	if s.what != "" {
		d.refuse(ingest.ReasonSyntax, i, s.at, s.what, nil)
	}
}

// plain reads a record as nearly all senders write it, in one go: labels n, u, v and t
// in any order, no white space, no escapes. It gives false for any other, of which
// it has taken nothing then: the general way has to read it.
func (s *scanner) plain(r *record) bool {
	b, i := s.b, s.i
	if i == len(b) || b[i] != '{' {
		return false
	}
	for {
		i++ // over the brace or the comma
		if len(b)-i < len(`"n":0}`) || b[i] != '"' || b[i+2] != '"' || b[i+3] != ':' {
			return false
		}
		l := b[i+1]
		i += 4
		n := 0
		switch l {
		case 'n':
			r.n, n = plainText(b[i:])
			r.mark(labelName)
		case 'u':
			r.u, n = plainText(b[i:])
			r.mark(labelUnit)
		case 'v':
			r.v, n = plainNumber(b[i:])
			r.mark(labelValue)
		case 't':
			r.t, n = plainNumber(b[i:])
			r.mark(labelTime)
		}
		if n == 0 {
			return false
		}
		i += n
		switch {
		case i == len(b):
			return false
		case b[i] == '}':
			s.i = i + 1
			return true
		case b[i] != ',':
			return false
		}
	}
}

// plainText gives the string that b begins with, and the bytes it takes, quotes
// included; 0 when there is none or it has escapes.
func plainText(b []byte) (text []byte, n int) {
	if len(b) == 0 || b[0] != '"' {
		return nil, 0
	}
	for i := 1; i < len(b); i++ {
		switch c := b[i]; {
		case c == '"':
			return b[1:i:i], i + 1
		case c == '\\' || c < ' ':
			return nil, 0
		}
	}
	return nil, 0
}

// plainNumber gives the finite number that b begins with, and the bytes it takes; 0
// when there is none.
func plainNumber(b []byte) (v float64, n int) {
	v, n, reason := decimal(b)
	if reason != ingest.ReasonNone {
		return 0, 0
	}
	return v, n
}

// label reads a label and the colon after it. Nearly all are one letter, written
// without white space or escapes.
func (s *scanner) label() label {
	if s.i+4 <= len(s.b) {
		if b := s.b[s.i : s.i+4]; b[0] == '"' && b[1] != '"' && b[1] != '\\' && b[1] >= ' ' && b[2] == '"' && b[3] == ':' {
			s.i += 4
			return textLabel(b[1:2])
		}
	}
	key := s.text()
	s.expect(':', `":" is due after a label`)
	return textLabel(key)
}

// field reads the value of a label into r.
func (s *scanner) field(r *record, l label, i int) {
	at := s.i
	reason := ingest.ReasonNone
	if p := r.number(l); p != nil {
		*p, reason = s.number()
	} else if p := r.text(l); p != nil && s.peek() == '"' {
		*p = s.text()
	} else {
		s.skip(0)
		if p != nil || l == labelMust {
			reason = ingest.ReasonSyntax
		}
	}
	if s.what != "" {
		return
	}
	r.mark(l)
	if reason != ingest.ReasonNone {
		s.d.wrong(r, l, reason, i, at)
	}
}

// scanner walks over JSON [RFC 8259] once, without a tree. The first error stays
// in what and at; after it every method returns zeros, so callers look once, at
// the end. It takes numbers as the function number does: a sender that writes NaN
// for one dead probe loses that value and not the pack.
//
// A library is not used because none of those at hand is exact, strict, free of
// allocations and linear in time on hostile input as well.
type scanner struct {
	b    []byte
	i    int
	d    *Decoder // gives the buffer for unescaped strings
	what string   // first error; empty while there is none
	at   int
}

func (s *scanner) fail(what string) {
	if s.what == "" {
		s.what, s.at = what, s.i
	}
	s.i = len(s.b)
}

// peek skips white space and gives the byte that follows, 0 at the end.
func (s *scanner) peek() byte {
	for ; s.i < len(s.b); s.i++ {
		if c := s.b[s.i]; c != ' ' && c != '\n' && c != '\r' && c != '\t' {
			return c
		}
	}
	return 0
}

func (s *scanner) expect(c byte, what string) {
	if s.peek() != c || s.i == len(s.b) {
		s.fail(what)
		return
	}
	s.i++
}

// next tells whether member n (from 0) of an array or object follows, and takes
// the comma before it, or else the closing bracket.
func (s *scanner) next(closing byte, n int) bool {
	if s.peek() == closing {
		s.i++
		return false
	}
	if n > 0 {
		s.expect(',', `"," or a closing bracket is due`)
		s.peek()
	}
	if s.i == len(s.b) {
		s.fail("payload ends too early")
	}
	return s.what == ""
}

// end expects the end of the payload.
func (s *scanner) end() {
	if s.peek(); s.i < len(s.b) {
		s.fail("something follows after the end")
	}
}

// text reads a string. It aliases the payload when it has no escapes.
func (s *scanner) text() []byte {
	s.expect('"', "a string is due")
	start, escaped := s.i, false
	b := s.b
	for i := start; i < len(b); i++ {
		switch c := b[i]; {
		case c == '"':
			s.i = i + 1
			if escaped {
				return s.unescape(b[start:i:i])
			}
			return b[start:i:i]
		case c == '\\':
			escaped = true
			i++ // whatever follows is not a closing quote
		case c < ' ':
			s.i = i
			s.fail("control character in a string")
			return nil
		}
	}
	s.i = len(b)
	s.fail("string has no end")
	return nil
}

// unescape resolves the escapes of a string into the decoder's buffer.
func (s *scanner) unescape(raw []byte) []byte {
	dst := s.d.names
	start := len(dst)
	for i := 0; i < len(raw); i++ {
		if raw[i] != '\\' {
			dst = append(dst, raw[i])
			continue
		}
		i++
		switch raw[i] {
		case '"', '\\', '/':
			dst = append(dst, raw[i])
		case 'b':
			dst = append(dst, '\b')
		case 'f':
			dst = append(dst, '\f')
		case 'n':
			dst = append(dst, '\n')
		case 'r':
			dst = append(dst, '\r')
		case 't':
			dst = append(dst, '\t')
		case 'u':
			r := hex4(raw[i+1:])
			if r < 0 {
				s.fail(`\u is not followed by four hexadecimal digits`)
				return nil
			}
			i += 4
			if utf16.IsSurrogate(r) {
				pair := rune(utf8.RuneError)
				if len(raw) > i+2 && raw[i+1] == '\\' && raw[i+2] == 'u' {
					pair = utf16.DecodeRune(r, hex4(raw[i+3:]))
				}
				if pair != utf8.RuneError {
					i += 6
				}
				r = pair
			}
			dst = utf8.AppendRune(dst, r)
		default:
			s.fail("unknown escape in a string")
			return nil
		}
	}
	s.d.names = dst
	return dst[start:len(dst):len(dst)]
}

// hex4 reads four hexadecimal digits; −1 when b does not start with them.
func hex4(b []byte) rune {
	if len(b) < 4 {
		return -1
	}
	var r rune
	for _, c := range b[:4] {
		r <<= 4
		switch {
		case c >= '0' && c <= '9':
			r |= rune(c - '0')
		case c >= 'a' && c <= 'f':
			r |= rune(c - 'a' + 10)
		case c >= 'A' && c <= 'F':
			r |= rune(c - 'A' + 10)
		default:
			return -1
		}
	}
	return r
}

// number reads a number. Any other value is read too and gives ReasonNotNumber.
func (s *scanner) number() (float64, ingest.Reason) {
	switch s.peek() {
	case '"', '{', '[':
		s.skip(0)
		return 0, ingest.ReasonNotNumber
	}
	v, n, reason := decimal(s.b[s.i:])
	if reason == ingest.ReasonSyntax {
		s.fail("a value is due")
		return 0, reason
	}
	s.i += n
	return v, reason
}

// decimal reads what b begins with up to where a number ends, n bytes. The words for
// what is no number give ReasonNotNumber.
func decimal(b []byte) (v float64, n int, reason ingest.Reason) {
	if v, n = exact(b); n > 0 && n < len(b) && ends(b[n]) {
		return v, n, ingest.ReasonNone
	}
	for n = 0; n < len(b) && !ends(b[n]); n++ {
	}
	switch string(b[:n]) {
	case "null", "true", "false":
		return 0, n, ingest.ReasonNotNumber
	}
	v, reason = number(b[:n])
	return v, n, reason
}

// ends tells whether c ends a number.
func ends(c byte) bool { return c == ',' || c == ']' || c == '}' || c <= ' ' }

// skip passes over any value.
func (s *scanner) skip(depth int) {
	closing := byte('}')
	switch s.peek() {
	case '"':
		s.text()
		return
	case '[':
		closing = ']'
	case '{':
	default:
		s.number()
		return
	}
	if depth == maxDepth {
		s.fail("arrays or objects are nested too deep")
		return
	}
	s.i++
	for n := 0; s.next(closing, n); n++ {
		if closing == '}' {
			s.text()
			s.expect(':', `":" is due after a label`)
		}
		s.skip(depth + 1)
	}
}
