// Package recording reads recordings that other data systems made, CSV or Parquet,
// and gives their values instant by instant, so that old tests can be stepped
// through the monitor.
//
// A Map says what the columns are. Two shapes are read: a column per channel, or a
// row per value with the channel's name in a column of its own. Rows that are a
// little out of order are sorted: Window rows are held back. A row that comes even
// later is given late, for the alignment to judge as it judges late messages.
//
// Bad input is data: a cell that is no number, a time that is none, a line that
// cannot be taken apart are counted and the first of them named with row and
// column; the reading goes on.
package recording

import (
	"container/heap"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"throatwatch/monitor/unit"
)

const (
	// Window is how many rows are held back so that they can be sorted by time.
	Window = 1 << 16
	// namedFaults is how many faults are named; all are counted.
	namedFaults = 20
)

// Form says how a CSV file is written. The zero value stands for commas, decimal
// points, the header in line 1 and the rows right below it.
type Form struct {
	Separator rune // 0 = a comma
	Decimal   rune // '.' or ','; 0 = a point
	Header    int  // line of the header, from 1; 0 = 1
	Data      int  // line of the first row; 0 = below the header
}

// Column says what a column of numbers is, or with Long a name in its column of
// names.
type Column struct {
	Name    string // in the header
	Channel int    // index in the rig
	Unit    unit.Unit
	Raw     unit.Unit // of the channel; of the dimension of Unit
}

// Long names the columns of a recording with a row per value.
type Long struct {
	Channel string // holds the names
	Value   string
	Unit    string // holds the units; "" = the units are those of Names
	Names   map[string]Column
}

// Constant is a value that the recording does not have.
type Constant struct {
	Channel int
	Raw     float64 // in the raw unit of the channel
}

// Map says how the columns of a recording become values of channels.
type Map struct {
	Form       Form
	Time       Clock
	Columns    []Column // a column per channel; none with Long
	Long       *Long
	Constants  []Constant
	Missing    map[string]bool // cells that say "no value", besides the empty ones and NaN
	EmptyWhere string          // rows with something in this column are left out; "" = none
}

// Value is the raw value of a channel, in the raw unit of the channel.
type Value struct {
	Channel int
	Raw     float64
}

// Row is what was recorded at one instant. It is valid until the next call of Next.
type Row struct {
	T      int64 // ns UTC
	Values []Value
}

// Counts tells what was read.
type Counts struct {
	Rows       uint64   `json:"rows"`
	Values     uint64   `json:"values"`
	LeftOut    uint64   `json:"left_out"`     // rows, as the map says
	BadTimes   uint64   `json:"bad_times"`    // rows without a time that can be read
	BadCells   uint64   `json:"bad_cells"`    // no number, unknown channel or unit
	BadLines   uint64   `json:"bad_lines"`    // cannot be taken apart
	OutOfOrder uint64   `json:"out_of_order"` // rows before the one above them
	Late       uint64   `json:"late"`         // of these, too late to be sorted
	Faults     []string `json:"faults"`       // the first ones, by row and column
}

// Bad is the number of times, cells and lines that could not be used.
func (c *Counts) Bad() uint64 { return c.BadTimes + c.BadCells + c.BadLines }

// cell is a cell of a row: a text, or what a typed column has.
type cell struct {
	text   string
	number float64
	whole  int64
	kind   cellKind
}

type cellKind uint8

const (
	cellEmpty cellKind = iota
	cellText
	cellNumber // number
	cellWhole  // whole
	cellTime   // whole, ns UTC
)

// empty tells whether there is nothing in the cell.
func (c *cell) empty() bool {
	return c.kind == cellEmpty || c.kind == cellText && strings.TrimSpace(c.text) == ""
}

// errLine is the error of a line that cannot be taken apart: the next one can.
var errLine = errors.New("line")

// table gives rows of cells. A row is valid until the next call.
type table interface {
	header() []string
	// next gives a row and its number for people; io.EOF at the end, an error that
	// is errLine for a row that is passed over.
	next() (row []cell, n int64, err error)
	part() float64 // that was read, 0 to 1
	close() error
}

// open opens a recording by the end of its name.
func open(path string, form Form) (table, error) {
	switch strings.ToLower(filepath.Ext(path)) {
	case ".csv", ".txt", ".tsv":
		return openCSV(path, form)
	case ".parquet":
		return openParquet(path)
	}
	return nil, fmt.Errorf("recording %s: give a file that ends in .csv or .parquet", path)
}

// Header gives the names of the columns of a recording.
func Header(path string, form Form) (names []string, err error) {
	t, err := open(path, form)
	if err != nil {
		return nil, err
	}
	return t.header(), t.close()
}

// Reader gives the rows of a recording in the order of time.
type Reader struct {
	m       *Map
	table   table
	time    []int // columns of the time
	columns []int // of Map.Columns
	long    [3]int
	where   int // column of EmptyWhere, −1 for none

	counts  Counts
	held    rows
	order   uint64
	last    int64 // time of the row read last
	given   int64 // of the row given last
	ended   bool
	reading []Value
	out     Row
}

// Open opens a recording. The map's columns must be in it: config.LoadMap sees to
// that; an error names the one that is not.
func Open(path string, m *Map) (*Reader, error) {
	t, err := open(path, m.Form)
	if err != nil {
		return nil, err
	}
	r := &Reader{m: m, table: t, where: -1, counts: Counts{Faults: []string{}}, last: math.MinInt64, given: math.MinInt64}
	if err := r.find(); err != nil {
		return nil, errors.Join(fmt.Errorf("recording %s: %w", path, err), t.close())
	}
	return r, nil
}

// find looks the columns up.
func (r *Reader) find() error {
	at := map[string]int{}
	for i, name := range r.table.header() {
		at[name] = i
	}
	var missing error
	look := func(name string) int {
		i, ok := at[name]
		if !ok && missing == nil {
			missing = fmt.Errorf("there is no column %q", name)
		}
		return i
	}
	for _, name := range r.m.Time.Columns {
		r.time = append(r.time, look(name))
	}
	for i := range r.m.Columns {
		r.columns = append(r.columns, look(r.m.Columns[i].Name))
	}
	if l := r.m.Long; l != nil {
		r.long = [3]int{look(l.Channel), look(l.Value), -1}
		if l.Unit != "" {
			r.long[2] = look(l.Unit)
		}
	}
	if r.m.EmptyWhere != "" {
		r.where = look(r.m.EmptyWhere)
	}
	return missing
}

// Close closes the file.
func (r *Reader) Close() error { return r.table.close() }

// Counts tells what was read so far.
func (r *Reader) Counts() Counts { return r.counts }

// Part tells how much of the file was read, 0 to 1.
func (r *Reader) Part() float64 { return r.table.part() }

// held is a row that waits to be sorted.
type held struct {
	t      int64
	order  uint64
	values []Value
}

// rows is a heap of rows, the oldest first, of one time in the order of the file.
type rows []held

func (h rows) Len() int { return len(h) }
func (h rows) Less(i, j int) bool {
	return h[i].t < h[j].t || h[i].t == h[j].t && h[i].order < h[j].order
}
func (h rows) Swap(i, j int) { h[i], h[j] = h[j], h[i] }

// Push is that of heap.Interface.
func (h *rows) Push(x any) { *h = append(*h, x.(held)) }

// Pop is that of heap.Interface.
func (h *rows) Pop() any {
	old := *h
	x := old[len(old)-1]
	old[len(old)-1] = held{}
	*h = old[:len(old)-1]
	return x
}

// Next gives the next instant: with a row per value, all values of one time
// together. io.EOF is returned at the end; every other error ends the reading.
func (r *Reader) Next() (*Row, error) {
	for !r.ended && len(r.held) < Window {
		if err := r.read(); errors.Is(err, io.EOF) {
			r.ended = true
		} else if err != nil {
			return nil, err
		}
	}
	if len(r.held) == 0 {
		return nil, io.EOF
	}
	first := heap.Pop(&r.held).(held)
	r.out.T, r.out.Values = first.t, append(r.out.Values[:0], first.values...)
	for r.m.Long != nil && len(r.held) > 0 && r.held[0].t == first.t {
		next := heap.Pop(&r.held).(held)
		r.out.Values = append(r.out.Values, next.values...)
	}
	for _, c := range r.m.Constants {
		r.out.Values = append(r.out.Values, Value(c))
	}
	if r.out.T < r.given {
		r.counts.Late++
	}
	r.given = max(r.given, r.out.T)
	return &r.out, nil
}

// fault names a fault, if there were few so far.
func (r *Reader) fault(n int64, column, what string) {
	if len(r.counts.Faults) == namedFaults {
		return
	}
	const most = 160 // bytes: a cell may be a page
	if len(what) > most {
		what = strings.ToValidUTF8(what[:most], "") + "…"
	}
	where := fmt.Sprintf("row %d", n)
	if column != "" {
		where += fmt.Sprintf(", column %q", column)
	}
	r.counts.Faults = append(r.counts.Faults, where+": "+what)
}

// read reads a row and holds it.
func (r *Reader) read() error {
	row, n, err := r.table.next()
	if errors.Is(err, errLine) {
		r.counts.Rows++
		r.counts.BadLines++
		r.fault(n, "", err.Error())
		return nil
	}
	if err != nil {
		return err
	}
	r.counts.Rows++
	if r.where >= 0 && !row[r.where].empty() {
		r.counts.LeftOut++
		return nil
	}
	cells := make([]cell, 0, 2)
	for _, i := range r.time {
		cells = append(cells, row[i])
	}
	t, err := r.m.Time.read(cells, r.m.Form.Decimal)
	if err != nil {
		r.counts.BadTimes++
		r.fault(n, r.m.Time.Columns[0], err.Error())
		return nil
	}
	r.reading = r.reading[:0]
	if r.m.Long != nil {
		r.value(row, n)
	} else {
		for i := range r.m.Columns {
			c := &r.m.Columns[i]
			r.take(c, &row[r.columns[i]], n)
		}
	}
	if t < r.last {
		r.counts.OutOfOrder++
	}
	r.last = t
	if len(r.reading) == 0 {
		return nil
	}
	r.counts.Values += uint64(len(r.reading))
	heap.Push(&r.held, held{t, r.order, append([]Value(nil), r.reading...)})
	r.order++
	return nil
}

// value takes the value of a row that has one.
func (r *Reader) value(row []cell, n int64) {
	l := r.m.Long
	name := strings.TrimSpace(row[r.long[0]].text)
	c, ok := l.Names[name]
	if !ok {
		r.counts.BadCells++
		r.fault(n, l.Channel, fmt.Sprintf("%q is no channel that the map takes", name))
		return
	}
	if r.long[2] >= 0 {
		text := strings.TrimSpace(row[r.long[2]].text)
		u, known := unit.Lookup([]byte(text))
		if !known || u.Dimension != c.Raw.Dimension {
			r.counts.BadCells++
			r.fault(n, l.Unit, fmt.Sprintf("unit %q does not fit channel %q, whose raw unit is %s", text, name, c.Raw.Name))
			return
		}
		c.Unit = u
	}
	c.Name = l.Value
	r.take(&c, &row[r.long[1]], n)
}

// take adds the value of a cell to what is read.
func (r *Reader) take(c *Column, x *cell, n int64) {
	v := x.number
	switch x.kind {
	case cellEmpty:
		return
	case cellWhole, cellTime:
		v = float64(x.whole)
	case cellText:
		text := strings.TrimSpace(x.text)
		if text == "" || r.m.Missing[text] {
			return
		}
		var ok bool
		if v, ok = number(text, r.m.Form.Decimal); !ok {
			r.counts.BadCells++
			r.fault(n, c.Name, fmt.Sprintf("%q is no number", text))
			return
		}
	case cellNumber:
		if r.m.Missing[strconv.FormatFloat(v, 'g', -1, 64)] {
			return
		}
	}
	switch {
	case v != v: // how many systems write "no value"
		return
	case math.IsInf(v, 0):
		r.counts.BadCells++
		r.fault(n, c.Name, "the number is infinite")
		return
	}
	if c.Unit.Name != c.Raw.Name { // an equal one goes through to the last bit
		v = c.Raw.FromSI(c.Unit.ToSI(v))
	}
	r.reading = append(r.reading, Value{c.Channel, v})
}

// number reads a plain decimal number, or NaN in any spelling.
func number(text string, decimal rune) (float64, bool) {
	if strings.EqualFold(text, "nan") {
		return math.NaN(), true
	}
	if decimal == ',' {
		if strings.Contains(text, ".") {
			return 0, false // a separator of thousands would be taken for the sign of the fraction
		}
		text = strings.Replace(text, ",", ".", 1)
	}
	for _, c := range text {
		if (c < '0' || c > '9') && !strings.ContainsRune("+-.eE", c) {
			return 0, false
		}
	}
	v, err := strconv.ParseFloat(text, 64)
	return v, err == nil
}

// size gives the size of an open file.
func size(f *os.File) (int64, error) {
	info, err := f.Stat()
	if err != nil {
		return 0, err
	}
	return info.Size(), nil
}
