package export

import (
	"bufio"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"os"
	"strconv"
	"strings"
	"time"
)

// csvSink writes CSV [RFC 4180]: lines end in CR LF, one header line, numbers with
// as many digits as give the same number again, true and false for flags.
type csvSink struct {
	columns []column
	w       *bufio.Writer
	line    []byte
}

func newCSV(w io.Writer, columns []column) (*csvSink, error) {
	s := &csvSink{columns: columns, w: bufio.NewWriterSize(w, 64<<10)}
	s.line = append(s.line, nameT+" [UTC],"+nameNS+" [ns]"...)
	for i := range columns {
		head := columns[i].name
		if unit := columns[i].unit; unit != "" {
			head += " [" + unit + "]"
		}
		s.line = appendCell(append(s.line, ','), head)
	}
	return s, s.end()
}

func (s *csvSink) end() error {
	_, err := s.w.Write(append(s.line, '\r', '\n'))
	s.line = s.line[:0]
	if err != nil {
		return fmt.Errorf("csv: %w", err)
	}
	return nil
}

// appendCell appends a text, in quotes where the standard asks for them [RFC 4180 2.6, 2.7].
func appendCell(dst []byte, cell string) []byte {
	if !strings.ContainsAny(cell, "\",\r\n") {
		return append(dst, cell...)
	}
	dst = append(dst, '"')
	for i := range len(cell) {
		if cell[i] == '"' {
			dst = append(dst, '"')
		}
		dst = append(dst, cell[i])
	}
	return append(dst, '"')
}

func (s *csvSink) write(b *batch) error {
	for i, t := range b.t {
		s.line = time.Unix(0, t).UTC().AppendFormat(s.line, "2006-01-02T15:04:05.000000000Z")
		s.line = strconv.AppendInt(append(s.line, ','), t, 10)
		for k := range s.columns {
			s.line = append(s.line, ',')
			switch v := &b.columns[k]; s.columns[k].kind {
			case number:
				if x := v.number[i]; x == x {
					s.line = strconv.AppendFloat(s.line, x, 'g', -1, 64)
				}
			case text:
				s.line = appendCell(s.line, v.text[i])
			case whole:
				s.line = strconv.AppendInt(s.line, v.whole[i], 10)
			case flag:
				s.line = strconv.AppendBool(s.line, v.flag[i])
			}
		}
		if err := s.end(); err != nil {
			return err
		}
	}
	return nil
}

func (s *csvSink) close() error {
	if err := s.w.Flush(); err != nil {
		return fmt.Errorf("csv: %w", err)
	}
	return nil
}

// countCSV reads a file and gives its rows and empty cells.
func countCSV(f *os.File) (rows, missing int64, err error) {
	if _, err := f.Seek(0, io.SeekStart); err != nil {
		return 0, 0, err
	}
	r := csv.NewReader(bufio.NewReaderSize(f, 64<<10))
	r.ReuseRecord = true
	for rows = -1; ; rows++ { // the header is none
		cells, err := r.Read()
		if errors.Is(err, io.EOF) {
			return rows, missing, nil
		}
		if err != nil {
			return rows, missing, err
		}
		for _, c := range cells {
			if c == "" {
				missing++
			}
		}
	}
}
