package decode

import (
	"errors"
	"strconv"
	"time"

	"github.com/influxdata/line-protocol/v2/lineprotocol"

	"throatwatch/ingest"
)

var (
	errLongName = errors.New("name is too long")
	errTooMany  = errors.New("too many lines or fields")
)

// lines decodes InfluxDB line protocol with times in ns. The field "value" gives
// a sample with the name of the measurement, another field one with the name
// measurement.field; tags take no part. A line with an error is lost whole, the
// other lines are used.
func (d *Decoder) lines(payload []byte) {
	dec := lineprotocol.NewDecoderWithBytes(payload)
	for n := 1; dec.Next(); n++ {
		first := len(d.res.Samples)
		err := d.line(dec, n)
		switch {
		case n > d.limits.Records || errors.Is(err, errTooMany):
			d.refuse(ingest.ReasonTooLarge, n, -1, errTooMany.Error(), nil)
			return
		case err != nil:
			d.res.Samples = d.res.Samples[:first]
			d.note(ingest.ReasonSyntax, n, -1, "line is not line protocol", err)
		}
	}
}

// line decodes line n. After an error its samples are the caller's to drop.
func (d *Decoder) line(dec *lineprotocol.Decoder, n int) error {
	first := len(d.res.Samples)
	measurement, err := dec.Measurement()
	if err != nil {
		return err
	}
	measurement = d.keep(measurement) // the library's slice lasts until its next call
	for {
		key, kind, raw, err := dec.NextFieldBytes()
		if err != nil {
			return err
		}
		if key == nil {
			break
		}
		v, reason, err := fieldValue(kind, raw)
		if err != nil {
			return err
		}
		if reason != ingest.ReasonNone {
			d.note(reason, n, -1, "field is not a finite number", nil)
			continue
		}
		switch {
		case len(measurement)+1+len(key) > MaxName:
			return errLongName
		case len(d.res.Samples) == d.limits.Records:
			return errTooMany
		}
		name := measurement
		if string(key) != "value" {
			name = d.keep(measurement, []byte{'.'}, key)
		}
		d.res.Samples = append(d.res.Samples, ingest.Sample{Name: name, Time: ingest.NoTime, Value: v})
	}
	stamp, err := dec.Time(lineprotocol.Nanosecond, time.Time{})
	if err != nil {
		return err
	}
	line := d.res.Samples[first:]
	if stamp.IsZero() { // not stamped: the zero Time is no time that ns can express
		d.res.DeviceTime = d.res.DeviceTime && len(line) == 0
		return nil
	}
	for i := range line {
		line[i].Time = stamp.UnixNano()
	}
	return nil
}

// fieldValue gives the number that a field holds, or why it holds none.
func fieldValue(kind lineprotocol.ValueKind, raw []byte) (float64, ingest.Reason, error) {
	switch kind {
	case lineprotocol.Int:
		v, err := strconv.ParseInt(string(raw), 10, 64)
		return float64(v), ingest.ReasonNone, err
	case lineprotocol.Uint:
		v, err := strconv.ParseUint(string(raw), 10, 64)
		return float64(v), ingest.ReasonNone, err
	case lineprotocol.Float:
		v, reason := number(raw)
		if reason == ingest.ReasonSyntax {
			return 0, reason, strconv.ErrSyntax
		}
		return v, reason, nil
	case lineprotocol.Bool, lineprotocol.String, lineprotocol.Unknown:
		return 0, ingest.ReasonNotNumber, nil
	}
	return 0, ingest.ReasonNotNumber, nil
}
