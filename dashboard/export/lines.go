package export

import (
	"bufio"
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"github.com/influxdata/line-protocol/v2/lineprotocol"

	"throatwatch/ingest/runfile"
)

// linesSink writes InfluxDB line protocol in the data model of package influx:
// measurements operating_point, channel, sample and one per kind of event; the tag
// rig, and of a sample channel; every number a float, whole ones too, as a field
// that is once an integer and once a float is refused. What is missing is left
// out; a row of which all is missing gives a line with the run alone.
type linesSink struct {
	columns []column
	fields  []string // by column; "" = none
	what    What
	header  *runfile.Header
	w       io.Writer
	enc     lineprotocol.Encoder
	channel int // column of the tag, −1 for none
	kind    int // column of the measurement, −1 for none
	n       int // column of the number of the outcome, −1 for none
}

func newLines(w io.Writer, columns []column, what What, h *runfile.Header) *linesSink {
	s := &linesSink{columns: columns, what: what, header: h, w: w, channel: -1, kind: -1, n: -1}
	s.enc.SetPrecision(lineprotocol.Nanosecond)
	for i := range columns {
		name := columns[i].name
		field := name
		switch {
		case what == Scans:
			field = strings.TrimPrefix(name, "channel.")
		case what == Samples && name == "channel":
			s.channel, field = i, ""
		case what == Events && name == "kind":
			s.kind, field = i, ""
		case what == Events && name == "n":
			s.n = i
		case what == Events && name == "run":
			field = "" // written for every table
		}
		s.fields = append(s.fields, field)
	}
	return s
}

// measurement gives the measurement of a row.
func (s *linesSink) measurement(b *batch, i int) string {
	switch {
	case s.kind >= 0 && b.columns[s.kind].text[i] != "":
		return b.columns[s.kind].text[i]
	case s.what == Events:
		return "event"
	case s.what == Samples:
		return "sample"
	case s.what == Scans:
		return "channel"
	}
	return "operating_point"
}

func (s *linesSink) write(b *batch) error {
	for i, t := range b.t {
		s.enc.StartLine(s.measurement(b, i))
		if s.channel >= 0 {
			if ch := b.columns[s.channel].text[i]; ch != "" {
				s.enc.AddTag("channel", ch)
			}
		}
		if s.header.Rig != "" {
			s.enc.AddTag("rig", s.header.Rig)
		}
		s.enc.AddField("run", str(s.header.ID))
		for k, field := range s.fields {
			if field == "" {
				continue
			}
			switch v := &b.columns[k]; s.columns[k].kind {
			case number:
				if x, ok := lineprotocol.FloatValue(v.number[i]); ok {
					s.enc.AddField(field, x)
				}
			case text:
				if v.text[i] != "" {
					s.enc.AddField(field, str(v.text[i]))
				}
			case whole:
				s.enc.AddField(field, lineprotocol.MustNewValue(float64(v.whole[i])))
			case flag:
				s.enc.AddField(field, lineprotocol.BoolValue(v.flag[i]))
			}
		}
		if s.n >= 0 { // several events of one instant would replace each other in a database
			t = t - t%1000 + b.columns[s.n].whole[i]%1000
		}
		s.enc.EndLine(time.Unix(0, t))
		if err := s.enc.Err(); err != nil {
			return fmt.Errorf("line protocol: %w", err)
		}
	}
	_, err := s.w.Write(s.enc.Bytes())
	s.enc.Reset()
	if err != nil {
		return fmt.Errorf("line protocol: %w", err)
	}
	return nil
}

// str gives a text as a value; what is no UTF-8 in it is replaced.
func str(text string) lineprotocol.Value {
	v, ok := lineprotocol.StringValue(text)
	if !ok {
		v, _ = lineprotocol.StringValue(strings.ToValidUTF8(text, "�"))
	}
	return v
}

func (s *linesSink) close() error { return nil }

// countLines reads a file and gives its lines.
func countLines(f *os.File) (n int64, err error) {
	if _, err := f.Seek(0, io.SeekStart); err != nil {
		return 0, err
	}
	dec := lineprotocol.NewDecoder(bufio.NewReaderSize(f, 64<<10))
	for dec.Next() {
		if _, err := dec.Measurement(); err != nil {
			return n, err
		}
		for {
			key, _, err := dec.NextTag()
			if err != nil {
				return n, err
			}
			if key == nil {
				break
			}
		}
		for {
			key, _, err := dec.NextField()
			if err != nil {
				return n, err
			}
			if key == nil {
				break
			}
		}
		if _, err := dec.Time(lineprotocol.Nanosecond, time.Time{}); err != nil {
			return n, err
		}
		n++
	}
	return n, nil
}
