package points

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"throatwatch/monitor"
)

// pointJSON is a point as JSON has it.
type pointJSON struct {
	Number int      `json:"number"`
	Name   string   `json:"name"`
	Status string   `json:"status"` // of a test card
	From   string   `json:"from"`
	To     string   `json:"to"`
	FromS  float64  `json:"from_s"` // s of the run
	ToS    float64  `json:"to_s"`
	Scans  int      `json:"scans"`
	Steady float64  `json:"steady_share"`
	Values []Value  `json:"values"`
	Doubts []string `json:"doubts"`
}

// MarshalJSON writes the table with times in RFC 3339 UTC.
func (t Table) MarshalJSON() ([]byte, error) {
	list := make([]pointJSON, len(t.Points))
	for i := range t.Points {
		p := &t.Points[i]
		list[i] = pointJSON{
			p.Number, p.Name, p.Status, rfc3339(p.From), rfc3339(p.To), float64(p.From-t.Started) / 1e9, float64(p.To-t.Started) / 1e9,
			p.Scans, p.Steady, p.Values, p.Doubts,
		}
	}
	return json.Marshal(struct {
		Run    string      `json:"run"`
		How    string      `json:"how"`
		Points []pointJSON `json:"points"`
		Left   []string    `json:"left_out"`
	}{t.Run, t.How, list, append([]string{}, t.Left...)})
}

func rfc3339(ns int64) string { return time.Unix(0, ns).UTC().Format(time.RFC3339Nano) }

// WriteTable writes the points for people, times in the zone of the facility.
func (t *Table) WriteTable(w io.Writer) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%s  %s\n", t.Run, t.How)
	if len(t.Points) == 0 {
		b.WriteString("There is none.\n")
	}
	for i := range t.Points {
		p := &t.Points[i]
		const form = "2006-01-02 15:04:05 -07:00"
		fmt.Fprintf(&b, "\nPoint %d", p.Number)
		if p.Name != "" {
			fmt.Fprintf(&b, ", %s", strings.Join(strings.Fields(p.Name), " "))
		}
		if p.Status != "" {
			fmt.Fprintf(&b, " (%s)", strings.Join(strings.Fields(p.Status), " "))
		}
		fmt.Fprintf(&b, ": %s to %s of the run, from %s, %d scans, steady in %s\n", t.clock(p.From), t.clock(p.To),
			time.Unix(0, p.From).In(t.Zone).Format(form), p.Scans, percent(p.Steady))
		tw := tabwriter.NewWriter(&b, 0, 0, 2, ' ', tabwriter.AlignRight)
		_, _ = fmt.Fprint(tw, "VALUE\t± U95\tTYPE A\tTYPE B\tEFFECTIVE\t\n")
		for k := range p.Values {
			v := &p.Values[k]
			d := Digits(float64(v.U95), float64(v.Value))
			_, _ = fmt.Fprintf(tw, "%s\t%s\t%s\t%s\t%s\t  %s\n", Decimal(float64(v.Value), d), Decimal(float64(v.U95), d), Decimal(float64(v.TypeA), d+1),
				Decimal(float64(v.TypeB), d+1), Decimal(float64(v.NEff), 0), strings.TrimSpace(v.Name+" "+bracket(v.Unit)))
		}
		if err := tw.Flush(); err != nil {
			return err
		}
		for _, text := range p.Doubts {
			fmt.Fprintf(&b, "  doubtful: %s\n", text)
		}
	}
	for _, text := range t.Left {
		fmt.Fprintf(&b, "left out: %s\n", text)
	}
	if len(t.Points) > 0 {
		b.WriteString("\nType A by the scatter of the scans and their effective number, Type B by the systematic errors of the channels,\n" +
			"both as standard uncertainty; U95 is both together, 95 % [JCGM 100]. – is not stated or not there.\n")
	}
	_, err := io.WriteString(w, b.String())
	return err
}

func bracket(unit string) string {
	if unit == "" {
		return ""
	}
	return "[" + unit + "]"
}

// WriteCSV writes a row per point [RFC 4180], units in the header, UTC.
func (t *Table) WriteCSV(w io.Writer) error {
	c := csv.NewWriter(w)
	c.UseCRLF = true
	head := []string{"point", "name", "from [UTC]", "to [UTC]", "from [s]", "to [s]", "scans", "steady_share"}
	for _, q := range Quantities() {
		info := q.Info()
		unit := bracket(info.Unit)
		for _, part := range []string{"", "_type_a", "_type_b", "_u95"} {
			head = append(head, strings.TrimSpace(info.Name+part+" "+unit))
		}
		head = append(head, info.Name+"_effective_samples")
	}
	_ = c.Write(append(head, "status", "doubts")) // Error tells
	for i := range t.Points {
		p := &t.Points[i]
		row := []string{
			strconv.Itoa(p.Number), p.Name, rfc3339(p.From), rfc3339(p.To), cell(Number(float64(p.From-t.Started) / 1e9)),
			cell(Number(float64(p.To-t.Started) / 1e9)), strconv.Itoa(p.Scans), cell(Number(p.Steady)),
		}
		for _, q := range Quantities() {
			row = append(row, cells(p, q)...)
		}
		_ = c.Write(append(row, p.Status, strings.Join(p.Doubts, "; ")))
	}
	c.Flush()
	return c.Error()
}

func cells(p *Point, q monitor.Quantity) []string {
	v, ok := p.Get(q)
	if !ok {
		return make([]string, 5)
	}
	return []string{cell(v.Value), cell(v.TypeA), cell(v.TypeB), cell(v.U95), cell(v.NEff)}
}

func cell(n Number) string {
	if v := float64(n); math.IsNaN(v) || math.IsInf(v, 0) {
		return ""
	}
	return strconv.FormatFloat(float64(n), 'g', -1, 64)
}

// Digits gives the decimals at which an uncertainty has two digits [JCGM 100 7.2.6];
// without one, those at which the value has five.
func Digits(u, value float64) int {
	digits := 1.0
	if !(u > 0) || math.IsInf(u, 0) {
		u, digits = math.Abs(value), 4
	}
	if !(u > 0) || math.IsInf(u, 0) {
		return 0
	}
	return min(max(int(digits-math.Floor(math.Log10(u))), 0), 9)
}

// Decimal writes a number with so many decimals, – for none.
func Decimal(v float64, digits int) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "–"
	}
	return strconv.FormatFloat(v, 'f', digits, 64)
}
