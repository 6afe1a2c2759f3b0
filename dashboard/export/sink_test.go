package export

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/influxdata/line-protocol/v2/lineprotocol"
	"github.com/parquet-go/parquet-go"

	"throatwatch/ingest/runfile"
)

// mixed is a table with a column of each kind, not in the order of the alphabet.
var mixed = []column{
	{"zeta", "kPa", "Last letter", number}, {"state", "", "State", text}, {"alpha", "", "First letter", whole}, {"lit", "", "Flame", flag},
}

// at is 2026-03-02T09:00:00.000000123Z: no whole microsecond.
const at = 1772442000000000123

func rowsOf(n int) *batch {
	b := newBatch(len(mixed))
	for i := range n {
		b.t = append(b.t, at+int64(i)*50_000_000)
		v, s := float64(i)+0.1, strings.Repeat("s", i%3) // every third state is missing
		if i%5 == 1 {
			v = math.NaN()
		}
		b.columns[0].number = append(b.columns[0].number, v)
		b.columns[1].text = append(b.columns[1].text, s)
		b.columns[2].whole = append(b.columns[2].whole, int64(i)-2)
		b.columns[3].flag = append(b.columns[3].flag, i%2 == 0)
	}
	return b
}

// A reader that knows nothing of this package finds columns, types, order, nulls and
// metadata, over several row groups.
func TestParquet(t *testing.T) {
	const n = 23
	var out bytes.Buffer
	s := newParquet(&out, mixed, []pair{{"rig", "cell_2"}, {"units", `{"zeta":"kPa"}`}})
	s.most = 10
	b := rowsOf(n)
	for _, err := range []error{s.write(b), s.close()} {
		if err != nil {
			t.Fatal(err)
		}
	}
	f, err := parquet.OpenFile(bytes.NewReader(out.Bytes()), int64(out.Len()))
	if err != nil {
		t.Fatal(err)
	}
	if v, _ := f.Lookup("units"); v != `{"zeta":"kPa"}` || f.NumRows() != n || len(f.RowGroups()) != 3 {
		t.Errorf("units %q, %d rows in %d groups", v, f.NumRows(), len(f.RowGroups()))
	}
	var schema []string
	for _, c := range f.Root().Columns() {
		schema = append(schema, strings.TrimSpace(c.Name()+" "+c.Type().String()+" "+map[bool]string{true: "null"}[c.Optional()]))
	}
	// Names of types as the format's specification prints logical types.
	want := []string{
		"t TIMESTAMP(isAdjustedToUTC=true,unit=MICROS)", "t_ns INT(64,true)", "zeta DOUBLE null", "state STRING null", "alpha INT(64,true)", "lit BOOLEAN",
	}
	if !slices.Equal(schema, want) {
		t.Errorf("schema %q\nwant   %q", schema, want)
	}
	row := 0
	for _, g := range f.RowGroups() {
		if codec := g.ColumnChunks()[2].(*parquet.FileColumnChunk).File().Metadata().RowGroups[0].Columns[2].MetaData.Codec.String(); codec != "ZSTD" {
			t.Errorf("packed by %s", codec)
		}
		r := g.Rows()
		buf := make([]parquet.Row, 64)
		k, err := r.ReadRows(buf)
		if err != nil && !errors.Is(err, io.EOF) {
			t.Fatal(err)
		}
		for _, got := range buf[:k] {
			x := b.columns[0].number[row]
			state := b.columns[1].text[row]
			switch {
			case got[0].Int64() != b.t[row]/1000, got[1].Int64() != b.t[row]:
				t.Errorf("row %d is at %d, %d", row, got[0].Int64(), got[1].Int64())
			case got[2].IsNull() != (x != x), x == x && got[2].Double() != x:
				t.Errorf("row %d has %v, want %v", row, got[2], x)
			case got[3].IsNull() != (state == ""), state != "" && got[3].String() != state:
				t.Errorf("row %d has state %v, want %q", row, got[3], state)
			case got[4].Int64() != int64(row)-2, got[5].Boolean() != (row%2 == 0):
				t.Errorf("row %d has %v, %v", row, got[4], got[5])
			}
			row++
		}
		if err := r.Close(); err != nil {
			t.Fatal(err)
		}
	}
	if row != n {
		t.Errorf("%d rows read", row)
	}
}

// Every text survives, line ends and quotes too, and every number to the last bit.
func TestCSV(t *testing.T) {
	var out bytes.Buffer
	s, err := newCSV(&out, mixed)
	if err != nil {
		t.Fatal(err)
	}
	b := rowsOf(4)
	b.columns[1].text = []string{`say "no", then`, "two\r\nlines", "", " blank "}
	b.columns[0].number = []float64{math.Pi * 1e300, math.NaN(), -math.SmallestNonzeroFloat64, 0.1 + 0.2}
	for _, err := range []error{s.write(b), s.close()} {
		if err != nil {
			t.Fatal(err)
		}
	}
	if !strings.HasPrefix(out.String(), "t [UTC],t_ns [ns],zeta [kPa],state,alpha,lit\r\n2026-03-02T09:00:00.000000123Z,1772442000000000123,") {
		t.Errorf("it begins with %q", out.String()[:120])
	}
	rows, err := csv.NewReader(&out).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for i, r := range rows[1:] {
		stamp, err := time.Parse(time.RFC3339Nano, r[0])
		if err != nil || stamp.UnixNano() != b.t[i] || r[1] != strconv.FormatInt(b.t[i], 10) {
			t.Errorf("row %d is at %s, %s: %v", i, r[0], r[1], err)
		}
		v, err := strconv.ParseFloat(r[2], 64)
		if x := b.columns[0].number[i]; x != x && r[2] != "" || x == x && (err != nil || v != x) {
			t.Errorf("row %d has %q, want %v", i, r[2], x)
		}
		// encoding/csv makes \n of \r\n inside quotes, as it documents.
		if want := strings.ReplaceAll(b.columns[1].text[i], "\r\n", "\n"); r[3] != want {
			t.Errorf("row %d has %q, want %q", i, r[3], want)
		}
	}
	if len(rows) != 5 {
		t.Errorf("%d lines", len(rows))
	}
}

// line is a decoded line.
type line struct {
	measurement string
	tags        map[string]string
	fields      map[string]any
	t           int64
}

func decodeLines(t *testing.T, b []byte) (out []line) {
	t.Helper()
	dec := lineprotocol.NewDecoderWithBytes(b)
	for dec.Next() {
		m, err := dec.Measurement()
		l := line{measurement: string(m), tags: map[string]string{}, fields: map[string]any{}}
		for err == nil {
			var k, v []byte
			if k, v, err = dec.NextTag(); k == nil {
				break
			}
			l.tags[string(k)] = string(v)
		}
		for err == nil {
			var k []byte
			var v lineprotocol.Value
			if k, v, err = dec.NextField(); k == nil {
				break
			}
			l.fields[string(k)] = v.Interface()
		}
		if err != nil {
			t.Fatal(err)
		}
		at, err := dec.Time(lineprotocol.Nanosecond, time.Time{})
		if err != nil {
			t.Fatal(err)
		}
		l.t = at.UnixNano()
		out = append(out, l)
	}
	return out
}

// Lines have the measurements, tags and types of the database's data model.
func TestLines(t *testing.T) {
	header := &runfile.Header{ID: "run 1", Rig: "cell_2"}
	for _, tt := range []struct {
		name    string
		what    What
		columns []column
		want    line
	}{
		{"points", OperatingPoints, mixed, line{"operating_point", map[string]string{"rig": "cell_2"}, map[string]any{"run": "run 1", "zeta": 2.1, "state": "ss", "alpha": 0.0, "lit": true}, at + 100_000_000}},
		{"scans", Scans, []column{{"channel.p8", "Pa", "", number}, {"quality.p8", "", "", text}, {"rows", "", "", whole}, {"x", "", "", flag}}, line{"channel", map[string]string{"rig": "cell_2"}, map[string]any{"run": "run 1", "p8": 2.1, "quality.p8": "ss", "rows": 0.0, "x": true}, at + 100_000_000}},
		{"samples", Samples, []column{{"value", "", "", number}, {"channel", "", "", text}, {"record", "", "", whole}, {"x", "", "", flag}}, line{"sample", map[string]string{"rig": "cell_2", "channel": "ss"}, map[string]any{"run": "run 1", "value": 2.1, "record": 0.0, "x": true}, at + 100_000_000}},
		{"events: below a microsecond stands the number", Events, []column{{"value", "", "", number}, {"kind", "", "", text}, {"n", "", "", whole}, {"x", "", "", flag}}, line{"ss", map[string]string{"rig": "cell_2"}, map[string]any{"run": "run 1", "value": 2.1, "n": 0.0, "x": true}, at - at%1000 + 100_000_000}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			var out bytes.Buffer
			s := newLines(&out, tt.columns, tt.what, header)
			if err := errors.Join(s.write(rowsOf(6)), s.close()); err != nil {
				t.Fatal(err)
			}
			all := decodeLines(t, out.Bytes())
			if len(all) != 6 {
				t.Fatalf("%d lines", len(all))
			}
			got, err1 := json.Marshal([]any{all[2].measurement, all[2].tags, all[2].fields, all[2].t})
			want, err2 := json.Marshal([]any{tt.want.measurement, tt.want.tags, tt.want.fields, tt.want.t})
			if string(got) != string(want) || err1 != nil || err2 != nil {
				t.Errorf("got  %s\nwant %s", got, want)
			}
			if _, there := all[1].fields[strings.TrimPrefix(tt.columns[0].name, "channel.")]; there {
				t.Errorf("a missing number is written: %v", all[1].fields)
			}
		})
	}
}

// Intervals give what a plain count over all rows gives.
func TestResampler(t *testing.T) {
	columns := []column{{"x", "Pa", "X", number}, {"state", "", "State", text}, {"lit", "", "Flame", flag}}
	stats := []Statistic{Last, Mean, Min, Max}
	const every = int64(300)
	r := newResampler(columns, every, stats)
	var names []string
	for _, c := range r.columns {
		names = append(names, c.name+" "+c.unit)
	}
	if got, want := strings.Join(names, ","), "rows ,x.last Pa,x.mean Pa,x.min Pa,x.max Pa,state ,lit "; got != want {
		t.Errorf("columns %q, want %q", got, want)
	}
	type interval struct {
		rows                 int64
		last, sum, low, high float64
		n                    float64
		state                string
		lit                  bool
	}
	want := map[int64]*interval{}
	var got []string
	put := func(b *batch) error {
		for i, at := range b.t {
			w := want[at]
			c := b.columns
			switch {
			case w == nil:
				t.Errorf("no interval begins at %d", at)
			case c[0].whole[i] != w.rows || c[5].text[i] != w.state || c[6].flag[i] != w.lit:
				t.Errorf("at %d: %d rows, %q, %v", at, c[0].whole[i], c[5].text[i], c[6].flag[i])
			case w.n == 0 && c[2].number[i] == c[2].number[i]:
				t.Errorf("at %d: a mean of nothing", at)
			case w.n > 0 && (c[1].number[i] != w.last || c[2].number[i] != w.sum/w.n || c[3].number[i] != w.low || c[4].number[i] != w.high):
				t.Errorf("at %d: %v %v %v %v, want %+v", at, c[1].number[i], c[2].number[i], c[3].number[i], c[4].number[i], w)
			}
			got = append(got, strconv.FormatInt(at, 10))
		}
		return nil
	}
	at := int64(-2000) // before 1970 too
	for k := range 40 {
		b := newBatch(3)
		for i := range 10 {
			at += int64(37 + (k*i)%160)
			v := math.Sin(float64(at))
			if k%7 == 3 {
				v = math.NaN()
			}
			state, lit := strconv.Itoa(i), i%2 == 0
			b.t, b.columns[0].number = append(b.t, at), append(b.columns[0].number, v)
			b.columns[1].text, b.columns[2].flag = append(b.columns[1].text, state), append(b.columns[2].flag, lit)
			begin := int64(math.Floor(float64(at)/float64(every))) * every
			if want[begin] == nil {
				want[begin] = &interval{}
			}
			w := want[begin]
			w.rows, w.state, w.lit = w.rows+1, state, lit
			if v == v {
				if w.n == 0 {
					w.low, w.high = v, v
				}
				w.last, w.sum, w.low, w.high, w.n = v, w.sum+v, min(w.low, v), max(w.high, v), w.n+1
			}
		}
		if err := r.add(b, put); err != nil {
			t.Fatal(err)
		}
	}
	if err := r.flush(put); err != nil {
		t.Fatal(err)
	}
	if len(got) != len(want) {
		t.Errorf("%d intervals, want %d", len(got), len(want))
	}
}

// Rows outside the time span go, the others keep their cells.
func TestCrop(t *testing.T) {
	b := rowsOf(9)
	all := rowsOf(9)
	b.crop(all.t[2], all.t[7])
	if !slices.Equal(b.t, all.t[2:7]) || !slices.Equal(b.columns[1].text, all.columns[1].text[2:7]) || !slices.Equal(b.columns[2].whole, all.columns[2].whole[2:7]) ||
		!slices.Equal(b.columns[3].flag, all.columns[3].flag[2:7]) || b.columns[0].number[0] != all.columns[0].number[2] || len(b.columns[0].number) != 5 {
		t.Errorf("%+v", b)
	}
}

// A file that does not read as what was written is a fault, whatever its form.
func TestCheckFindsDamage(t *testing.T) {
	for _, format := range []Format{Parquet, CSV, Lines} {
		for _, damage := range []string{"none", "cut", "other count"} {
			t.Run(format.String()+" "+damage, func(t *testing.T) {
				e := &Export{opt: Options{Format: format, What: OperatingPoints}}
				var out bytes.Buffer
				var s sink
				var err error
				switch format {
				case Parquet:
					s = newParquet(&out, mixed, nil)
				case CSV:
					s, err = newCSV(&out, mixed)
				case Lines:
					s = newLines(&out, mixed, OperatingPoints, &runfile.Header{ID: "r"})
				case FormatInvalid, numFormats:
				}
				b := rowsOf(50)
				if err := errors.Join(err, s.write(b), s.close()); err != nil {
					t.Fatal(err)
				}
				sum := Summary{Rows: 50, Missing: b.missing(mixed)}
				body := out.Bytes()
				switch damage {
				case "cut":
					body = body[:len(body)-30]
				case "other count":
					sum.Rows++
				}
				path := filepath.Join(t.TempDir(), "f")
				if err := os.WriteFile(path, body, 0o600); err != nil {
					t.Fatal(err)
				}
				f, err := os.Open(path)
				if err != nil {
					t.Fatal(err)
				}
				defer f.Close()
				if err := e.check(f, sum); (err == nil) != (damage == "none") {
					t.Errorf("it says %v", err)
				}
			})
		}
	}
}
