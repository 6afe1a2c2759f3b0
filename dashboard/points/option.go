package points

import (
	"fmt"
	"math"
	"net/url"
	"strconv"
	"strings"
	"time"

	"throatwatch/dashboard/export"
)

// ParseOptions reads what is asked for: from, to, at (auto, marks or card), least, before and
// after as 20s, and stretch as 120s..180s or with times, any number of it. Times are s of
// the run, which started at started, ns UTC, or RFC 3339. The error wraps ErrOption.
func ParseOptions(q url.Values, started int64) (o Options, err error) {
	if o.From, o.To, err = export.Stretch(q.Get("from"), q.Get("to"), started); err != nil {
		return o, fmt.Errorf("%w: %w", ErrOption, err)
	}
	for _, text := range q["stretch"] {
		s, err := parseStretch(text, started)
		if err != nil {
			return o, err
		}
		o.Given = append(o.Given, s)
	}
	switch at := q.Get("at"); at {
	case "", "auto":
	case "marks":
		o.Marks = true
	case "card":
		o.Card = true
	default:
		return o, fmt.Errorf("%w: at %q: give auto, marks or card", ErrOption, at)
	}
	for _, d := range []struct {
		name string
		dst  *int64
	}{{"least", &o.Least}, {"before", &o.Before}, {"after", &o.After}} {
		text := q.Get(d.name)
		if text == "" {
			continue
		}
		v, err := time.ParseDuration(text)
		if err != nil || v < 0 {
			return o, fmt.Errorf("%w: %s %q: give a time as 30s", ErrOption, d.name, text)
		}
		*d.dst = int64(v)
	}
	return o, nil
}

// parseStretch reads the two ends of a stretch.
func parseStretch(text string, started int64) (Stretch, error) {
	from, to, both := strings.Cut(text, "..")
	var s Stretch
	for _, end := range []struct {
		text string
		dst  *int64
	}{{from, &s.From}, {to, &s.To}} {
		t, ok := parseTime(end.text, started)
		if !ok || !both {
			return s, fmt.Errorf("%w: %q: give two times of the run as 120s..180s, or as 2026-03-02T09:00:00Z..2026-03-02T09:01:00Z", ErrOption, text)
		}
		*end.dst = t
	}
	if s.To <= s.From {
		return s, fmt.Errorf("%w: %q ends before it begins", ErrOption, text)
	}
	return s, nil
}

func parseTime(text string, started int64) (int64, bool) {
	if t, err := time.Parse(time.RFC3339Nano, text); err == nil && t.Year() >= 1970 && t.Year() < 2262 {
		return t.UnixNano(), true
	}
	if d, err := time.ParseDuration(text); err == nil {
		return started + int64(d), true
	}
	v, err := strconv.ParseFloat(text, 64)
	if err != nil || !(math.Abs(v) < 1e8) {
		return 0, false
	}
	return started + int64(math.Round(v*1e9)), true
}
