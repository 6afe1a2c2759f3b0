package pipeline

import (
	"fmt"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
)

// Kinds of chunk in a run file.
const (
	ChunkPoints   = "points"   // a column per quantity, and the states
	ChunkChannels = "channels" // channel.<id> and quality.<id> per channel
)

// The state columns of ChunkPoints, in the order of their codes below.
var stateColumns = []string{"choke_state", "phase", "back_pressure_from", "total_pressure_from", "total_temperature_from", "flags"}

// Bits of the column "flags".
const (
	FlagMarginal = 1 << iota
	FlagArmed
	FlagLit
	FlagSteady
)

// Columns gathers the rows of a chunk.
type Columns struct {
	times    []int64
	values   [monitor.NumQuantities][]float64
	states   [][]byte
	channels []string
	readings [][]float64
	quality  [][]byte
}

// NewColumns makes room for a minute of rows.
func NewColumns(cfg *Config) *Columns {
	n := int(60*second/cfg.Align.Period) + 16
	c := &Columns{times: make([]int64, 0, n)}
	for q := range c.values {
		c.values[q] = make([]float64, 0, n)
	}
	for range stateColumns {
		c.states = append(c.states, make([]byte, 0, n))
	}
	for i := range cfg.Compute.Channels {
		c.channels = append(c.channels, cfg.Compute.Channels[i].ID)
		c.readings = append(c.readings, make([]float64, 0, n))
		c.quality = append(c.quality, make([]byte, 0, n))
	}
	return c
}

// Rows gives the number of rows.
func (c *Columns) Rows() int { return len(c.times) }

// Add appends the row of an operating point.
func (c *Columns) Add(o *Outcome) {
	p, scan := o.Point, o.Scan
	c.times = append(c.times, o.T)
	for q := range c.values {
		c.values[q] = append(c.values[q], p.V[q])
	}
	var flags byte
	for bit, set := range []bool{p.ChokeMarginal, p.ChokeArmed, p.Lit, p.Steady} {
		if set {
			flags |= 1 << bit
		}
	}
	for i, v := range [...]byte{byte(p.Choke), byte(p.Phase), byte(p.BackFrom), byte(p.PressureBy), byte(p.TemperatureBy), flags} {
		c.states[i] = append(c.states[i], v)
	}
	for i := range c.readings {
		c.readings[i] = append(c.readings[i], scan.Value[i])
		c.quality[i] = append(c.quality[i], byte(scan.Quality[i]))
	}
}

// Chunks packs the rows.
func (c *Columns) Chunks(codec *archive.Codec) ([]runfile.Chunk, error) {
	points := archive.Chunk{Times: c.times}
	for q := range c.values {
		points.Columns = append(points.Columns, archive.Column{
			Name: monitor.Quantity(q).Info().Name, Kind: archive.KindFloat, Float: c.values[q],
		})
	}
	for i, name := range stateColumns {
		points.Columns = append(points.Columns, archive.Column{Name: name, Kind: archive.KindByte, Byte: c.states[i]})
	}
	channels := archive.Chunk{Times: c.times}
	for i, id := range c.channels {
		channels.Columns = append(channels.Columns,
			archive.Column{Name: "channel." + id, Kind: archive.KindFloat, Float: c.readings[i]},
			archive.Column{Name: "quality." + id, Kind: archive.KindByte, Byte: c.quality[i]})
	}
	var out []runfile.Chunk
	for _, part := range []struct {
		kind  string
		chunk *archive.Chunk
	}{{ChunkPoints, &points}, {ChunkChannels, &channels}} {
		if len(part.chunk.Columns) == 0 {
			continue
		}
		b, err := codec.Append(nil, part.chunk)
		if err != nil {
			return nil, fmt.Errorf("chunk %s: %w", part.kind, err)
		}
		out = append(out, runfile.Chunk{
			Kind: part.kind, FirstT: c.times[0], LastT: c.times[len(c.times)-1], Rows: len(c.times), Bytes: b,
		})
	}
	return out, nil
}
