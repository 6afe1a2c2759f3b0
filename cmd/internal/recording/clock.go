package recording

import (
	"errors"
	"fmt"
	"math"
	"math/big"
	"strings"
	"time"
)

// Kinds of time column.
const (
	ClockRFC3339 = "rfc3339" // 2026-03-02T09:00:00.5Z, or with an offset
	ClockEpoch   = "epoch"   // a count of Unit since 1970-01-01T00:00:00Z
	ClockElapsed = "elapsed" // a count of Unit since Start
	ClockStamp   = "stamp"   // a typed time of a Parquet file
	ClockPattern = "pattern" // Layout, in Zone
)

// Clock says what the time of a row is.
type Clock struct {
	Columns []string // one, or several that are joined by a blank
	Kind    string
	Unit    int64          // ns per count, of epoch and elapsed
	Start   int64          // of elapsed, ns UTC
	Layout  string         // of pattern, as package time has it
	Zone    *time.Location // of pattern
}

// Why a time cannot be read.
var (
	errNoTime    = errors.New("the time is missing")
	errTimeKind  = errors.New("the column holds no such time as the map says")
	errRange     = errors.New("the time is outside 1970 to 2262")
	errAmbiguous = errors.New("the clock was put back here: the time is there twice; state the zone as an offset, as +01:00")
	errSkipped   = errors.New("the clock was put forward here: there is no such time in the zone")
)

// Pattern makes a layout of a pattern: YYYY, MM, DD, hh, mm, ss, a fraction of f
// behind a point or a comma, ZZ for an offset; other letters are refused.
func Pattern(pattern string) (layout string, err error) {
	var b strings.Builder
	rest := pattern
	found := map[string]bool{}
next:
	for rest != "" {
		for _, p := range [...][2]string{{"YYYY", "2006"}, {"MM", "01"}, {"DD", "02"}, {"hh", "15"}, {"mm", "04"}, {"ss", "05"}, {"ZZ", "Z07:00"}} {
			if strings.HasPrefix(rest, p[0]) {
				if found[p[0]] {
					return "", fmt.Errorf("%s is there twice", p[0])
				}
				found[p[0]] = true
				b.WriteString(p[1])
				rest = rest[len(p[0]):]
				continue next
			}
		}
		if n := fraction(rest); n > 1 {
			if !strings.HasSuffix(b.String(), "05") {
				return "", errors.New("a fraction stands behind the seconds")
			}
			// The library reads a fraction of any length behind the seconds by itself.
			rest = rest[n:]
			continue
		}
		c := rest[0]
		if c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' && c != 'T' || c >= '0' && c <= '9' || c == '_' || c >= 0x80 {
			return "", fmt.Errorf("%q is not understood", rest)
		}
		b.WriteByte(c)
		rest = rest[1:]
	}
	for _, need := range []string{"YYYY", "MM", "DD", "hh", "mm"} {
		if !found[need] {
			return "", fmt.Errorf("%s is missing", need)
		}
	}
	return b.String(), nil
}

// fraction gives the length of a sign and f that s begins with.
func fraction(s string) int {
	if s[0] != '.' && s[0] != ',' {
		return 0
	}
	n := 1
	for n < len(s) && s[n] == 'f' {
		n++
	}
	return n
}

// read gives the time of a row, ns UTC.
func (c *Clock) read(cells []cell, decimal rune) (int64, error) {
	for i := range cells {
		if cells[i].kind == cellEmpty {
			return 0, errNoTime
		}
	}
	first := cells[0]
	switch c.Kind {
	case ClockStamp:
		if first.kind != cellTime {
			return 0, errTimeKind
		}
		return within(first.whole)
	case ClockEpoch, ClockElapsed:
		n, err := c.count(first, decimal)
		if err != nil {
			return 0, err
		}
		if c.Kind == ClockElapsed {
			if n > 0 && c.Start > math.MaxInt64-n {
				return 0, errRange
			}
			n += c.Start
		}
		return within(n)
	}
	var text strings.Builder
	for i := range cells {
		if cells[i].kind != cellText {
			return 0, errTimeKind
		}
		if i > 0 {
			text.WriteByte(' ')
		}
		text.WriteString(strings.TrimSpace(cells[i].text))
	}
	if text.Len() == 0 {
		return 0, errNoTime
	}
	if c.Kind == ClockRFC3339 {
		t, err := time.Parse(time.RFC3339Nano, text.String())
		if err != nil {
			return 0, fmt.Errorf("%q is no time as in 2026-03-02T09:00:00.5Z", text.String())
		}
		return nanos(t)
	}
	t, err := time.ParseInLocation(c.Layout, text.String(), c.Zone)
	if err != nil {
		return 0, fmt.Errorf("%q is no time of the pattern", text.String())
	}
	if strings.Contains(c.Layout, "Z07:00") {
		return nanos(t)
	}
	const wall = "2006-01-02T15:04:05"
	// The library moves a time that a clock put forward never showed.
	if want, _ := time.ParseInLocation(c.Layout, text.String(), time.UTC); t.Format(wall) != want.Format(wall) {
		return 0, errSkipped
	}
	for _, shift := range []time.Duration{-2 * time.Hour, -time.Hour, -30 * time.Minute, 30 * time.Minute, time.Hour, 2 * time.Hour} {
		if t.Add(shift).Format(wall) == t.Format(wall) {
			return 0, errAmbiguous
		}
	}
	return nanos(t)
}

// count gives a count in ns, exact to the last digit that a text has.
func (c *Clock) count(x cell, decimal rune) (int64, error) {
	switch x.kind {
	case cellWhole:
		if v := x.whole * c.Unit; c.Unit == 0 || v/c.Unit == x.whole {
			return v, nil
		}
		return 0, errRange
	case cellNumber:
		v := math.Round(x.number * float64(c.Unit))
		if !(math.Abs(v) < math.MaxInt64) {
			return 0, errRange
		}
		return int64(v), nil
	case cellEmpty, cellTime:
		return 0, errTimeKind
	case cellText:
	}
	text := strings.TrimSpace(x.text)
	if text == "" {
		return 0, errNoTime
	}
	v, ok := number(text, decimal)
	if !ok || v != v {
		return 0, fmt.Errorf("%q is no number", text)
	}
	if !(math.Abs(v)*float64(c.Unit) < math.MaxInt64) {
		return 0, errRange
	}
	if decimal == ',' {
		text = strings.Replace(text, ",", ".", 1)
	}
	exact, ok := new(big.Rat).SetString(text)
	if !ok || len(text) > 40 { // a float64 has the digits that matter
		return int64(math.Round(v * float64(c.Unit))), nil
	}
	exact.Mul(exact, new(big.Rat).SetInt64(c.Unit))
	// Half a nanosecond up: the digits beyond are noise.
	exact.Add(exact, big.NewRat(1, 2))
	q, m := new(big.Int), new(big.Int)
	q.DivMod(exact.Num(), exact.Denom(), m)
	if !q.IsInt64() {
		return 0, errRange
	}
	return q.Int64(), nil
}

func nanos(t time.Time) (int64, error) {
	if y := t.Year(); y < 1970 || y >= 2262 {
		return 0, errRange
	}
	return t.UnixNano(), nil
}

func within(t int64) (int64, error) {
	if t < 0 || t >= time.Date(2262, 1, 1, 0, 0, 0, 0, time.UTC).UnixNano() {
		return 0, errRange
	}
	return t, nil
}
