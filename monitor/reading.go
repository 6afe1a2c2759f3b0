package monitor

import (
	"encoding/json"
	"fmt"
	"strconv"
	"time"
)

// Reading is a number that may not be known. It is comparable, as NaN is not.
type Reading struct {
	V     float64
	Known bool
}

// ReadingOf gives v, as not known if it is no finite number.
func ReadingOf(v float64) Reading {
	if v-v != 0 {
		return Reading{}
	}
	return Reading{v, true}
}

// MarshalJSON writes the number, or null when it is not known.
func (r Reading) MarshalJSON() ([]byte, error) {
	if !r.Known {
		return []byte("null"), nil
	}
	return json.Marshal(r.V)
}

// UnmarshalJSON reads a number or null.
func (r *Reading) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*r = Reading{}
		return nil
	}
	v, err := strconv.ParseFloat(string(b), 64)
	if err != nil {
		return fmt.Errorf("value %s: %w", b, err)
	}
	*r = ReadingOf(v)
	return nil
}

// Time is an event time in ns UTC; 0 is none. As JSON it is RFC 3339 in UTC to
// the nanosecond, or null.
type Time int64

// MarshalJSON writes RFC 3339 or null.
func (t Time) MarshalJSON() ([]byte, error) {
	if t == 0 {
		return []byte("null"), nil
	}
	return time.Unix(0, int64(t)).UTC().AppendFormat(nil, `"`+time.RFC3339Nano+`"`), nil
}

// UnmarshalJSON reads what MarshalJSON writes.
func (t *Time) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*t = 0
		return nil
	}
	at, err := time.Parse(`"`+time.RFC3339Nano+`"`, string(b))
	if err != nil {
		return fmt.Errorf("time %s: %w", b, err)
	}
	*t = Time(at.UnixNano())
	return nil
}
