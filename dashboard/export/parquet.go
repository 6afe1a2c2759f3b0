package export

import (
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/parquet-go/parquet-go"
	"github.com/parquet-go/parquet-go/compress/zstd"
)

const (
	// groupCells bounds the cells of a row group, and so the memory of a writer.
	groupCells = 8 << 20
	// mostGroup bounds the rows of a row group.
	mostGroup = 1_000_000
)

// table is the root of a schema whose fields keep their order: the library's own
// would sort them by name.
type table struct {
	parquet.Group
	fields []parquet.Field
}

// Fields gives the columns in the order of the table.
func (t table) Fields() []parquet.Field { return t.fields }

func schema(columns []column) *parquet.Schema {
	t := table{Group: parquet.Group{}}
	names := []string{nameT, nameNS}
	// Microseconds: some readers cut or refuse nanoseconds; t_ns has them.
	t.Group[nameT] = parquet.Encoded(parquet.Timestamp(parquet.Microsecond), &parquet.DeltaBinaryPacked)
	t.Group[nameNS] = parquet.Encoded(parquet.Int(64), &parquet.DeltaBinaryPacked)
	for i := range columns {
		c := &columns[i]
		names = append(names, c.name)
		switch c.kind {
		case number:
			t.Group[c.name] = parquet.Optional(parquet.Leaf(parquet.DoubleType))
		case text:
			t.Group[c.name] = parquet.Optional(parquet.Encoded(parquet.String(), &parquet.RLEDictionary))
		case whole:
			t.Group[c.name] = parquet.Encoded(parquet.Int(64), &parquet.DeltaBinaryPacked)
		case flag:
			t.Group[c.name] = parquet.Leaf(parquet.BooleanType)
		}
	}
	sorted := map[string]parquet.Field{}
	for _, f := range t.Group.Fields() {
		sorted[f.Name()] = f
	}
	for _, name := range names {
		t.fields = append(t.fields, sorted[name])
	}
	return parquet.NewSchema("scans", t)
}

// parquetSink writes Parquet, column by column.
type parquetSink struct {
	columns []column
	w       *parquet.GenericWriter[any]
	out     []*parquet.ColumnWriter
	group   int // rows in the open row group
	most    int // rows in a row group
	values  []parquet.Value
}

func newParquet(w io.Writer, columns []column, metadata []pair) *parquetSink {
	options := []parquet.WriterOption{
		schema(columns),
		parquet.Compression(&zstd.Codec{Level: zstd.SpeedDefault}),
		parquet.CreatedBy("throatwatch", "", ""),
	}
	for _, p := range metadata {
		options = append(options, parquet.KeyValueMetadata(p.key, p.value))
	}
	s := &parquetSink{columns: columns, w: parquet.NewGenericWriter[any](w, options...)}
	s.out = s.w.ColumnWriters()
	s.most = min(mostGroup, max(1, groupCells/(len(columns)+2)))
	return s
}

func (s *parquetSink) write(b *batch) error {
	for from := 0; from < len(b.t); {
		to := min(len(b.t), from+s.most-s.group)
		if err := s.rows(b, from, to); err != nil {
			return err
		}
		s.group += to - from
		from = to
		if s.group < s.most {
			continue
		}
		s.group = 0
		if err := s.w.Flush(); err != nil {
			return fmt.Errorf("parquet: %w", err)
		}
	}
	return nil
}

// rows writes the rows from … to of a batch.
func (s *parquetSink) rows(b *batch, from, to int) error {
	put := func(k int) error {
		_, err := s.out[k].WriteRowValues(s.values)
		if s.values = s.values[:0]; err != nil {
			return fmt.Errorf("parquet: %w", err)
		}
		return nil
	}
	add := func(v parquet.Value, level, k int) { s.values = append(s.values, v.Level(0, level, k)) }
	for _, t := range b.t[from:to] {
		add(parquet.Int64Value(t/1000), 0, 0)
	}
	if err := put(0); err != nil {
		return err
	}
	for _, t := range b.t[from:to] {
		add(parquet.Int64Value(t), 0, 1)
	}
	if err := put(1); err != nil {
		return err
	}
	for i := range s.columns {
		k := i + 2
		switch v := &b.columns[i]; s.columns[i].kind {
		case number:
			for _, x := range v.number[from:to] {
				if x != x {
					add(parquet.NullValue(), 0, k)
				} else {
					add(parquet.DoubleValue(x), 1, k)
				}
			}
		case text:
			for _, x := range v.text[from:to] {
				if x == "" {
					add(parquet.NullValue(), 0, k)
				} else {
					add(parquet.ByteArrayValue([]byte(x)), 1, k)
				}
			}
		case whole:
			for _, x := range v.whole[from:to] {
				add(parquet.Int64Value(x), 0, k)
			}
		case flag:
			for _, x := range v.flag[from:to] {
				add(parquet.BooleanValue(x), 0, k)
			}
		}
		if err := put(k); err != nil {
			return err
		}
	}
	return nil
}

func (s *parquetSink) close() error {
	if err := s.w.Close(); err != nil {
		return fmt.Errorf("parquet: %w", err)
	}
	return nil
}

// countParquet reads every page of a file and gives its rows and missing cells.
func countParquet(f *os.File) (rows, missing int64, err error) {
	info, err := f.Stat()
	if err != nil {
		return 0, 0, err
	}
	p, err := parquet.OpenFile(f, info.Size())
	if err != nil {
		return 0, 0, err
	}
	for _, group := range p.RowGroups() {
		for _, chunk := range group.ColumnChunks() {
			values, nulls, err := countChunk(chunk)
			if err == nil && values != group.NumRows() {
				err = fmt.Errorf("column %d has %d values for %d rows", chunk.Column(), values, group.NumRows())
			}
			if err != nil {
				return 0, 0, err
			}
			missing += nulls
		}
	}
	return p.NumRows(), missing, nil
}

func countChunk(chunk parquet.ColumnChunk) (values, nulls int64, err error) {
	pages := chunk.Pages()
	defer func() { err = errors.Join(err, pages.Close()) }()
	for {
		page, err := pages.ReadPage()
		if errors.Is(err, io.EOF) {
			return values, nulls, nil
		}
		if err != nil {
			return 0, 0, err
		}
		values += page.NumValues()
		nulls += page.NumNulls()
		parquet.Release(page)
	}
}
