package recording

import (
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/format"
)

// parquetTable reads Parquet with flat columns; a nested one is taken for a column
// without values.
type parquetTable struct {
	f      *os.File
	file   *parquet.File
	names  []string
	leaves []leaf
	at     map[int]int // column of a leaf
	groups []parquet.RowGroup
	rows   parquet.Rows
	buf    []parquet.Row
	ready  []parquet.Row
	n      int64
	row    []cell
}

// leaf says how the values of a column are read.
type leaf struct {
	perNS int64 // ns per count of a typed time; 0 for none
	flat  bool
}

// rowsAtOnce is how many rows are read at a time.
const rowsAtOnce = 256

func openParquet(path string) (t *parquetTable, err error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("recording: %w", err)
	}
	defer func() {
		// The library is known to have panicked on damaged files.
		if r := recover(); r != nil {
			err = fmt.Errorf("the file is damaged: %v", r)
		}
		if err != nil {
			t, err = nil, errors.Join(fmt.Errorf("recording %s: %w", path, err), f.Close())
		}
	}()
	n, err := size(f)
	if err != nil {
		return nil, err
	}
	file, err := parquet.OpenFile(f, n)
	if err != nil {
		return nil, err
	}
	t = &parquetTable{f: f, file: file, groups: file.RowGroups(), at: map[int]int{}, buf: make([]parquet.Row, rowsAtOnce)}
	for _, c := range file.Root().Columns() {
		l := leaf{flat: c.Leaf() && !c.Repeated()}
		if l.flat {
			l.perNS = perNS(c.Type().LogicalType())
			t.at[c.Index()] = len(t.names)
		}
		t.names, t.leaves = append(t.names, c.Name()), append(t.leaves, l)
	}
	t.row = make([]cell, len(t.names))
	return t, nil
}

// perNS gives the ns per count of a time, 0 for another type.
func perNS(logical *format.LogicalType) int64 {
	if logical == nil {
		return 0
	}
	stamp, ok := logical.Value.(*format.TimestampType)
	if !ok {
		return 0
	}
	switch stamp.Unit.Value.(type) {
	case *format.MilliSeconds:
		return 1e6
	case *format.MicroSeconds:
		return 1e3
	}
	return 1
}

func (t *parquetTable) header() []string { return t.names }

func (t *parquetTable) next() (row []cell, n int64, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("recording: row %d: the file is damaged: %v", t.n+1, r)
		}
	}()
	for len(t.ready) == 0 {
		if err := t.fill(); err != nil {
			return nil, 0, err
		}
	}
	values := t.ready[0]
	t.ready = t.ready[1:]
	t.n++
	clear(t.row)
	for _, v := range values {
		if i, ok := t.at[v.Column()]; ok && !v.IsNull() {
			t.row[i] = t.leaves[i].cell(v)
		}
	}
	return t.row, t.n, nil
}

// fill reads the next rows.
func (t *parquetTable) fill() error {
	if t.rows == nil {
		if len(t.groups) == 0 {
			return io.EOF
		}
		t.rows, t.groups = t.groups[0].Rows(), t.groups[1:]
	}
	n, err := t.rows.ReadRows(t.buf)
	t.ready = t.buf[:n]
	if errors.Is(err, io.EOF) {
		for i := range t.ready { // they alias memory that is given back
			t.ready[i] = t.ready[i].Clone()
		}
		err = t.rows.Close()
		t.rows = nil
	}
	if err != nil {
		return fmt.Errorf("recording: row %d: %w", t.n+1, err)
	}
	return nil
}

// cell gives the value of a column.
func (l leaf) cell(v parquet.Value) cell {
	switch v.Kind() {
	case parquet.Boolean:
		if v.Boolean() {
			return cell{whole: 1, kind: cellWhole}
		}
		return cell{kind: cellWhole}
	case parquet.Int32:
		return l.count(int64(v.Int32()))
	case parquet.Int64:
		return l.count(v.Int64())
	case parquet.Float:
		return cell{number: float64(v.Float()), kind: cellNumber}
	case parquet.Double:
		return cell{number: v.Double(), kind: cellNumber}
	case parquet.ByteArray, parquet.FixedLenByteArray:
		return cell{text: string(v.ByteArray()), kind: cellText}
	case parquet.Int96: // no number, and deprecated as a time
	}
	return cell{text: v.String(), kind: cellText}
}

func (l leaf) count(n int64) cell {
	if l.perNS == 0 {
		return cell{whole: n, kind: cellWhole}
	}
	if ns := n * l.perNS; ns/l.perNS == n {
		return cell{whole: ns, kind: cellTime}
	}
	return cell{whole: -1, kind: cellTime} // outside of what ns can tell: no time
}

func (t *parquetTable) part() float64 {
	if n := t.file.NumRows(); n > 0 {
		return float64(t.n) / float64(n)
	}
	return 1
}

func (t *parquetTable) close() error {
	var err error
	if t.rows != nil {
		err = t.rows.Close()
	}
	return errors.Join(err, t.f.Close())
}
