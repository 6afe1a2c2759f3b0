package recording

import (
	"bufio"
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
)

// csvTable reads CSV [RFC 4180], with other separators on request.
type csvTable struct {
	f     io.Closer
	size  int64
	count *counter
	r     *csv.Reader
	above int // lines above the header
	data  int // line of the first row
	names []string
	row   []cell
}

// counter counts what is read.
type counter struct {
	r io.Reader
	n int64
}

// Read is that of io.Reader.
func (c *counter) Read(p []byte) (int, error) {
	n, err := c.r.Read(p)
	c.n += int64(n)
	return n, err
}

func openCSV(path string, form Form) (*csvTable, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("recording: %w", err)
	}
	t, err := newCSV(f, form)
	if err == nil {
		t.f = f
		t.size, err = size(f)
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("recording %s: %w", path, err), f.Close())
	}
	return t, nil
}

// mostLine bounds the lines above a header, bytes: a file that is no text has none.
const mostLine = 1 << 20

func newCSV(in io.Reader, form Form) (*csvTable, error) {
	t := &csvTable{count: &counter{r: in}, above: max(form.Header, 1) - 1, data: form.Data}
	b := bufio.NewReaderSize(t.count, 256<<10)
	if mark, err := b.Peek(3); err == nil && bytes.Equal(mark, []byte("\ufeff")) {
		_, _ = b.Discard(len(mark)) // it was there a moment ago
	}
	for range t.above {
		n := 0
		for {
			part, err := b.ReadSlice('\n')
			if n += len(part); n > mostLine {
				return nil, errors.New("it has no lines: it is no CSV file")
			}
			if errors.Is(err, bufio.ErrBufferFull) {
				continue
			}
			if err != nil {
				return nil, fmt.Errorf("it ends above line %d, where the header is due", t.above+1)
			}
			break
		}
	}
	t.r = csv.NewReader(b)
	t.r.ReuseRecord = true
	t.r.FieldsPerRecord = -1
	if form.Separator != 0 {
		t.r.Comma = form.Separator
	}
	names, err := t.r.Read()
	if errors.Is(err, io.EOF) {
		return nil, fmt.Errorf("it ends above line %d, where the header is due", t.above+1)
	}
	if err != nil {
		return nil, fmt.Errorf("header in line %d: %w", t.above+1, err)
	}
	for _, name := range names {
		t.names = append(t.names, strings.TrimSpace(strings.Clone(name)))
	}
	return t, nil
}

func (t *csvTable) header() []string { return t.names }

func (t *csvTable) next() ([]cell, int64, error) {
	for {
		record, err := t.r.Read()
		if errors.Is(err, io.EOF) {
			return nil, 0, io.EOF
		}
		if damage, ok := errors.AsType[*csv.ParseError](err); ok {
			return nil, int64(damage.StartLine + t.above), fmt.Errorf("the %w cannot be taken apart: %w", errLine, damage.Err)
		}
		if err != nil {
			return nil, 0, fmt.Errorf("recording: %w", err)
		}
		line, _ := t.r.FieldPos(0)
		line += t.above
		if line < t.data {
			continue
		}
		if len(record) != len(t.names) {
			return nil, int64(line), fmt.Errorf("the %w has %d cells, the header %d", errLine, len(record), len(t.names))
		}
		t.row = t.row[:0]
		for _, text := range record {
			c := cell{text: text, kind: cellText}
			if text == "" {
				c.kind = cellEmpty
			}
			t.row = append(t.row, c)
		}
		return t.row, int64(line), nil
	}
}

func (t *csvTable) part() float64 {
	if t.size == 0 {
		return 1
	}
	return float64(t.count.n) / float64(t.size)
}

func (t *csvTable) close() error { return t.f.Close() }
