package recording

import (
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"
	_ "time/tzdata"

	"github.com/parquet-go/parquet-go"

	"throatwatch/monitor/unit"
)

func units(tb testing.TB, names ...string) (out []unit.Unit) {
	tb.Helper()
	for _, n := range names {
		u, err := unit.Parse(n)
		if err != nil {
			tb.Fatal(err)
		}
		out = append(out, u)
	}
	return out
}

func write(tb testing.TB, name, text string) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		tb.Fatal(err)
	}
	return path
}

// all reads a recording to its end: a line per row.
func all(t *testing.T, path string, m *Map) (lines []string, c Counts) {
	t.Helper()
	r, err := Open(path, m)
	if err != nil {
		t.Fatal(err)
	}
	for {
		row, err := r.Next()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		lines = append(lines, fmt.Sprint(row.T, row.Values))
	}
	if p := r.Part(); p != 1 {
		t.Errorf("at the end %v is read", p)
	}
	if err := r.Close(); err != nil {
		t.Fatal(err)
	}
	return lines, r.Counts()
}

// Times are read to the last digit, in their zone, and what is none is told.
func TestClock(t *testing.T) {
	zone := func(name string) *time.Location {
		z, err := time.LoadLocation(name)
		if err != nil {
			t.Fatal(err)
		}
		return z
	}
	pattern := func(p string, z *time.Location) Clock {
		layout, err := Pattern(p)
		if err != nil {
			t.Fatal(err)
		}
		return Clock{Kind: ClockPattern, Layout: layout, Zone: z}
	}
	zurich := pattern("DD.MM.YYYY hh:mm:ss.fff", zone("Europe/Zurich"))
	text := func(s ...string) (out []cell) {
		for _, x := range s {
			out = append(out, cell{text: x, kind: cellText})
		}
		return out
	}
	for _, tt := range []struct {
		name  string
		clock Clock
		cells []cell
		want  string // RFC 3339, or the error
	}{
		// Offsets and dates of the changes of summer time: directive 2000/84/EC, articles 2 and 3.
		{"rfc3339", Clock{Kind: ClockRFC3339}, text("2026-03-02T10:00:00.123456789+01:00"), "2026-03-02T09:00:00.123456789Z"},
		{"rfc3339, not", Clock{Kind: ClockRFC3339}, text("2026-03-02 10:00"), "no time as in"},
		{"epoch, ns as text", Clock{Kind: ClockEpoch, Unit: 1}, text("1772442000000000123"), "2026-03-02T09:00:00.000000123Z"},
		{"epoch, s with all digits", Clock{Kind: ClockEpoch, Unit: 1e9}, text("1772442000.000000123"), "2026-03-02T09:00:00.000000123Z"},
		{"epoch, ms, exponent", Clock{Kind: ClockEpoch, Unit: 1e6}, text("1.772442e12"), "2026-03-02T09:00:00Z"},
		{"epoch, whole", Clock{Kind: ClockEpoch, Unit: 1}, []cell{{whole: 1772442000000000123, kind: cellWhole}}, "2026-03-02T09:00:00.000000123Z"},
		{"epoch, float64", Clock{Kind: ClockEpoch, Unit: 1e9}, []cell{{number: 1772442000.5, kind: cellNumber}}, "2026-03-02T09:00:00.5Z"},
		{"epoch, too large", Clock{Kind: ClockEpoch, Unit: 1e9}, text("1772442000000"), "outside 1970 to 2262"},
		{"epoch, whole, too large", Clock{Kind: ClockEpoch, Unit: 1e9}, []cell{{whole: math.MaxInt64 / 2, kind: cellWhole}}, "outside"},
		{"epoch, before", Clock{Kind: ClockEpoch, Unit: 1e9}, text("-1"), "outside"},
		{"epoch, not", Clock{Kind: ClockEpoch, Unit: 1e9}, text("soon"), "no number"},
		{"epoch, NaN", Clock{Kind: ClockEpoch, Unit: 1e9}, text("NaN"), "no number"},
		{"elapsed", Clock{Kind: ClockElapsed, Unit: 1e9, Start: 1772442000e9}, text("12.05"), "2026-03-02T09:00:12.05Z"},
		{"elapsed, before the start", Clock{Kind: ClockElapsed, Unit: 1e6, Start: 1772442000e9}, text("-500"), "2026-03-02T08:59:59.5Z"},
		{"elapsed, far", Clock{Kind: ClockElapsed, Unit: 1e9, Start: 1772442000e9}, text("9e9"), "outside"},
		{"stamp", Clock{Kind: ClockStamp}, []cell{{whole: 1772442000e9, kind: cellTime}}, "2026-03-02T09:00:00Z"},
		{"stamp, not", Clock{Kind: ClockStamp}, text("2026"), "no such time"},
		{"missing", Clock{Kind: ClockRFC3339}, []cell{{}}, "missing"},
		{"blank", Clock{Kind: ClockRFC3339}, text("  "), "missing"},
		{"winter in Zurich", zurich, text("02.03.2026 10:00:00.250"), "2026-03-02T09:00:00.25Z"},
		{"summer in Zurich, comma", zurich, text("02.07.2026 10:00:00,25"), "2026-07-02T08:00:00.25Z"},
		{"two columns", pattern("YYYY-MM-DD hh:mm:ss", time.UTC), text("2026-03-02", " 09:00:00 "), "2026-03-02T09:00:00Z"},
		{"offset", pattern("YYYY/MM/DDThh:mm:ssZZ", nil), text("2026/03/02T11:00:00+02:00"), "2026-03-02T09:00:00Z"},
		{"put forward", zurich, text("29.03.2026 02:30:00"), "put forward"},
		{"just before", zurich, text("29.03.2026 01:59:59"), "2026-03-29T00:59:59Z"},
		{"put back", zurich, text("25.10.2026 02:30:00"), "there twice"},
		{"just after", zurich, text("25.10.2026 03:00:00"), "2026-10-25T02:00:00Z"},
		{"half an hour at Lord Howe", pattern("YYYY-MM-DD hh:mm", zone("Australia/Lord_Howe")), text("2026-04-05 01:45"), "there twice"},
		{"of no pattern", zurich, text("2026-03-02"), "no time of the pattern"},
		{"number for a pattern", zurich, []cell{{number: 1, kind: cellNumber}}, "no such time"},
	} {
		got, err := tt.clock.read(tt.cells, '.')
		said := ""
		if err != nil {
			said = err.Error()
		} else {
			said = time.Unix(0, got).UTC().Format(time.RFC3339Nano)
		}
		if said != tt.want && (err == nil || !strings.Contains(said, tt.want)) {
			t.Errorf("%s: %s, want %s", tt.name, said, tt.want)
		}
	}
	for _, bad := range []string{"", "YYYY-MM-DD", "YYYY-MM-DD hh:mm:ss x", "YYYY-MM-DD hh:mm YYYY", "YY-MM-DD hh:mm", "YYYY-MM-DD hh.ff:mm", "hh:mm", "2006-01-02 15:04"} {
		if layout, err := Pattern(bad); err == nil {
			t.Errorf("%q is taken for the layout %q", bad, layout)
		}
	}
}

// Bad cells, times and lines are counted and named by row and column; the others go on.
func TestFaultsOfRows(t *testing.T) {
	u := units(t, "kPa", "psi", "degC")
	m := &Map{
		Form: Form{Separator: ';', Decimal: ',', Header: 2, Data: 4},
		Time: Clock{Columns: []string{"Time"}, Kind: ClockElapsed, Unit: 1e9},
		Columns: []Column{
			{Name: "P7", Channel: 4, Unit: u[1], Raw: u[0]}, {Name: "EGT", Channel: 2, Unit: u[2], Raw: u[2]},
		},
		Constants:  []Constant{{Channel: 9, Raw: 100.25}},
		Missing:    map[string]bool{"-9999": true},
		EmptyWhere: "Bad",
	}
	lines, c := all(t, write(t, "a.csv", "\ufeffTest of an invented engine\r\n"+
		"Time;P7;EGT;Bad;Comment\r\n"+
		"s;psi;degC;;\r\n"+
		"1,5;10;600,25;;a\r\n"+
		"2;;-9999;;only the time\r\n"+
		"1,75;NaN;601;;before the row above\r\n"+
		"2,5;10,5x;602;;\r\n"+
		"later;10;603;;\r\n"+
		"3;10;604\r\n"+
		"3,25;10;605;x;\r\n"+
		"3,5;\"10\"x;606;;\r\n"+
		"3,75;1.000,5;607;;\r\n"+
		"4;Inf;608;;\r\n"+
		"4,25;1e999;\"609\";;\"two\r\nlines\"\r\n"+
		"4,5;0x10;610;;\r\n"), m)
	// 1 psi = 6.894757 kPa (NIST SP 811, appendix B.8).
	want := []string{
		"1500000000 [{4 68.94757293168362} {2 600.25} {9 100.25}]",
		"1750000000 [{2 601} {9 100.25}]",
		"2500000000 [{2 602} {9 100.25}]",
		"3750000000 [{2 607} {9 100.25}]",
		"4000000000 [{2 608} {9 100.25}]",
		"4250000000 [{2 609} {9 100.25}]",
		"4500000000 [{2 610} {9 100.25}]",
	}
	if !slices.Equal(lines, want) {
		t.Errorf("rows\n%s\nwant\n%s", strings.Join(lines, "\n"), strings.Join(want, "\n"))
	}
	faults := []string{
		`row 7, column "P7": "10,5x" is no number`,
		`row 8, column "Time": "later" is no number`,
		`row 9: the line has 3 cells, the header 5`,
		`row 11: the line cannot be taken apart: extraneous or missing " in quoted-field`,
		`row 12, column "P7": "1.000,5" is no number`,
		`row 13, column "P7": "Inf" is no number`,
		`row 14, column "P7": "1e999" is no number`,
		`row 16, column "P7": "0x10" is no number`,
	}
	if !slices.Equal(c.Faults, faults) {
		t.Errorf("faults\n%s\nwant\n%s", strings.Join(c.Faults, "\n"), strings.Join(faults, "\n"))
	}
	c.Faults = nil
	if got, want := fmt.Sprintf("%+v", c), "{Rows:12 Values:8 LeftOut:1 BadTimes:1 BadCells:5 BadLines:2 OutOfOrder:1 Late:0 Faults:[]}"; got != want {
		t.Errorf("counts %s, want %s", got, want)
	}
}

// Rows that are out of order are sorted within the window, and later ones come late.
func TestOrder(t *testing.T) {
	u := units(t, "kPa")[0]
	m := &Map{Time: Clock{Columns: []string{"t"}, Kind: ClockEpoch, Unit: 1}, Columns: []Column{{Name: "p", Channel: 0, Unit: u, Raw: u}}}
	var b strings.Builder
	b.WriteString("t,p\n")
	const n = Window + 500
	for i := range n {
		at := 10 * i
		if i == 300 {
			at = 5 // 299 rows late: sorted
		}
		if i == n-1 {
			at = 7 // all rows late
		}
		fmt.Fprintf(&b, "%d,%d\n", at, i)
	}
	lines, c := all(t, write(t, "a.csv", b.String()), m)
	if len(lines) != n || lines[0] != "0 [{0 0}]" || lines[1] != "5 [{0 300}]" || lines[2] != "10 [{0 1}]" || c.OutOfOrder != 2 || c.Late != 1 {
		t.Errorf("%d rows, begin %v, counts %+v", len(lines), lines[:3], c)
	}
	// The row that is late comes when it is read, which is Window rows before its place.
	if i := slices.Index(lines, fmt.Sprintf("7 [{0 %d}]", n-1)); i != n-Window+1 && i != n-Window {
		t.Errorf("the late row is number %d", i)
	}
}

// A row per value gives all values of one time together, each in its own unit.
func TestLong(t *testing.T) {
	u := units(t, "kPa", "degC", "degF")
	long := func(unitColumn string) *Map {
		return &Map{
			Time: Clock{Columns: []string{"t"}, Kind: ClockEpoch, Unit: 1e9},
			Long: &Long{Channel: "name", Value: "v", Unit: unitColumn, Names: map[string]Column{
				"p": {Channel: 1, Unit: u[0], Raw: u[0]}, "T": {Channel: 2, Unit: u[2], Raw: u[1]},
			}},
		}
	}
	path := write(t, "a.csv", "t,name,v,unit\n1,p,250,kPa\n1,T,212,degF\n2,T,100,degC\n2,x,1,kPa\n3,p,1,degC\n3,p,2.5,bar\n")
	lines, c := all(t, path, long("unit"))
	want := []string{"1000000000 [{1 250} {2 100}]", "2000000000 [{2 100}]", "3000000000 [{1 250}]"} // 212 °F = 100 °C, exact by definition
	for i := range lines {
		lines[i] = strings.Replace(lines[i], "{2 100.00000000000006}", "{2 100}", 1) // by way of 373.15 K
	}
	if !slices.Equal(lines, want) || c.BadCells != 2 {
		t.Errorf("rows %q, want %q; %+v", lines, want, c)
	}
	if lines, _ := all(t, path, long("")); len(lines) != 3 || !strings.HasPrefix(lines[1], "2000000000 [{2 37.7") { // 100 °F
		t.Errorf("by the units of the map: %q", lines)
	}
}

// Parquet of any number type is read, nulls are missing, a damaged file is told.
func TestParquet(t *testing.T) {
	type row struct {
		T    time.Time `parquet:"t,timestamp(millisecond)"`
		NS   int64     `parquet:"ns"`
		F64  *float64  `parquet:"f64,optional"`
		F32  float32   `parquet:"f32"`
		I32  int32     `parquet:"i32"`
		On   bool      `parquet:"on"`
		Text string    `parquet:"text"`
		List []int64   `parquet:"list"`
	}
	at := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	var rows []row
	for i := range 700 {
		r := row{T: at.Add(time.Duration(i) * time.Millisecond), NS: at.UnixNano() + int64(i), F32: 0.5, I32: int32(i), On: i%2 == 1, Text: fmt.Sprint(i, ".25"), List: []int64{1, 2}}
		r.Text = strings.ReplaceAll(r.Text, " ", "")
		if i%3 > 0 {
			v := float64(i) + 0.1
			r.F64 = &v
		}
		rows = append(rows, r)
	}
	path := filepath.Join(t.TempDir(), "a.parquet")
	f, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	w := parquet.NewGenericWriter[row](f, parquet.MaxRowsPerRowGroup(300))
	_, err = w.Write(rows)
	if err := errors.Join(err, w.Close(), f.Close()); err != nil {
		t.Fatal(err)
	}
	one := units(t, "1")[0]
	var columns []Column
	for i, name := range []string{"f64", "f32", "i32", "on", "text"} {
		columns = append(columns, Column{Name: name, Channel: i, Unit: one, Raw: one})
	}
	names, err := Header(path, Form{})
	if err != nil || strings.Join(names, ",") != "t,ns,f64,f32,i32,on,text,list" {
		t.Errorf("columns %v: %v", names, err)
	}
	for name, clock := range map[string]Clock{
		"ms": {Columns: []string{"t"}, Kind: ClockStamp}, "ns": {Columns: []string{"ns"}, Kind: ClockEpoch, Unit: 1},
	} {
		lines, c := all(t, path, &Map{Time: clock, Columns: columns})
		if len(lines) != 700 || c.Bad() != 0 {
			t.Fatalf("%d rows, %+v", len(lines), c)
		}
		for i, got := range lines {
			want := fmt.Sprintf("[{1 0.5} {2 %d} {3 %d} {4 %d.25}]", i, i%2, i)
			if i%3 > 0 {
				want = fmt.Sprintf("[{0 %d.1} ", i) + want[1:]
			}
			stamp := rows[i].T.UnixNano()
			if name == "ns" {
				stamp = rows[i].NS
			}
			if got != fmt.Sprint(stamp)+" "+want {
				t.Fatalf("row %d is %s, want %d %s", i, got, stamp, want)
			}
		}
	}
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 60 { // damage anywhere is told or harmless
		content := slices.Clone(whole)
		content[i*len(content)/60] ^= 0x55
		if i == 0 {
			content = content[:len(content)/2]
		}
		bad := write(t, "b.parquet", string(content))
		r, err := Open(bad, &Map{Time: Clock{Columns: []string{"ns"}, Kind: ClockEpoch, Unit: 1}, Columns: columns})
		if err != nil {
			continue
		}
		for err == nil {
			_, err = r.Next()
		}
		_ = r.Close()
	}
}

// What cannot be opened says why.
func TestOpenRefuses(t *testing.T) {
	m := &Map{Time: Clock{Columns: []string{"t"}, Kind: ClockEpoch, Unit: 1}}
	for _, tt := range []struct{ name, text, says string }{
		{"a.xls", "t\n1\n", "ends in .csv or .parquet"},
		{"a.parquet", "t\n1\n", "a.parquet"},
		{"a.csv", "", "ends above line 1"},
		{"b.csv", "x\n1\n", `no column "t"`},
	} {
		if _, err := Open(write(t, tt.name, tt.text), m); err == nil || !strings.Contains(err.Error(), tt.says) {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
	m.Form.Header = 3
	if _, err := Open(write(t, "a.csv", "one\ntwo\n"), m); err == nil || !strings.Contains(err.Error(), "ends above line 3") {
		t.Errorf("a header beyond the end: %v", err)
	}
	if _, err := Open(filepath.Join(t.TempDir(), "none.csv"), m); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("no file: %v", err)
	}
}

// Whatever a CSV file holds, the reading ends, and what it gives is finite and in
// order but for rows that are told to be late.
func FuzzCSV(f *testing.F) {
	f.Add("t,p\n1,2\n", uint8(0))
	f.Add("t;p\r\n2026-03-02 09:00:00;\"1,5\"\r\n", uint8(1))
	f.Add("\ufefft,p\n\"1\n", uint8(0))
	f.Add("#\nt,p\n1e5,-0\n1,NaN\n0,Inf", uint8(2))
	u := units(f, "kPa", "psi")
	f.Fuzz(func(t *testing.T, text string, kind uint8) {
		m := &Map{Time: Clock{Columns: []string{"t"}, Kind: ClockEpoch, Unit: 1e9}, Columns: []Column{{Name: "p", Unit: u[1], Raw: u[0]}}}
		switch kind % 3 {
		case 1:
			layout, err := Pattern("YYYY-MM-DD hh:mm:ss")
			if err != nil {
				t.Fatal(err)
			}
			m.Form, m.Time = Form{Separator: ';', Decimal: ','}, Clock{Columns: []string{"t"}, Kind: ClockPattern, Layout: layout, Zone: time.UTC}
		case 2:
			m.Form = Form{Header: 2}
		}
		table, err := newCSV(strings.NewReader(text), m.Form)
		if err != nil {
			return
		}
		r := &Reader{m: m, table: table, where: -1, last: math.MinInt64, given: math.MinInt64}
		if r.find() != nil {
			return
		}
		last, late := int64(0), uint64(0)
		for {
			row, err := r.Next()
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
			if row.T < last {
				late++
			}
			last = max(last, row.T)
			for _, v := range row.Values {
				if math.IsNaN(v.Raw) || math.IsInf(v.Raw, 0) {
					t.Fatalf("%v", row)
				}
			}
		}
		if c := r.Counts(); late != c.Late || len(c.Faults) > namedFaults || c.Bad() < uint64(len(c.Faults)) {
			t.Fatalf("%d late rows, %+v", late, c)
		}
	})
}

// A time is within its bounds or none, and a count of ns comes back as it is.
func FuzzClock(f *testing.F) {
	f.Add("1772442000.5", int64(1e9))
	f.Add("1e-400", int64(1))
	f.Add("02.03.2026 10:00:00", int64(1e6))
	layout, err := Pattern("DD.MM.YYYY hh:mm:ss")
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, text string, per int64) {
		for _, c := range []Clock{
			{Kind: ClockRFC3339},
			{Kind: ClockEpoch, Unit: per},
			{Kind: ClockElapsed, Unit: per, Start: per},
			{Kind: ClockPattern, Layout: layout, Zone: time.UTC},
		} {
			for _, decimal := range []rune{'.', ','} {
				got, err := c.read([]cell{{text: text, kind: cellText}}, decimal)
				if err == nil && (got < 0 || time.Unix(0, got).UTC().Year() >= 2262) {
					t.Fatalf("%s: %d", c.Kind, got)
				}
			}
		}
		if layout, err := Pattern(text); err == nil && layout == "" {
			t.Fatal("a layout of nothing")
		}
	})
}
