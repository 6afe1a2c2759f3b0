package bench

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"

	"throatwatch/ingest/decode"
)

// Pairs are taken by turns, the order changing, and the median is of the ratios, not
// the ratio of medians.
func TestAlternate(t *testing.T) {
	var order []string
	left, right := []float64{1, 8, 3}, []float64{2, 2, 2}
	take := func(name string, of *[]float64) func() (float64, error) {
		return func() (float64, error) {
			order = append(order, name)
			v := (*of)[0]
			*of = (*of)[1:]
			return v, nil
		}
	}
	list, err := alternate(3, take("a", &left), take("b", &right))
	if err != nil {
		t.Fatal(err)
	}
	if want := strings.Split("a b b a a b", " "); !slices.Equal(order, want) {
		t.Errorf("order %v, want %v", order, want)
	}
	f := compared("x", list, "≥ 2", func(f *Figure) bool { return *f.Ratio >= 2 })
	if f.Ours != 3 || *f.Beside != 2 || *f.Ratio != 1.5 || *f.Met {
		t.Errorf("%+v, beside %v, ratio %v, met %v", f, *f.Beside, *f.Ratio, *f.Met)
	}
	bad := errors.New("bad")
	if _, err := alternate(2, func() (float64, error) { return 0, bad }, func() (float64, error) { return 1, nil }); !errors.Is(err, bad) {
		t.Errorf("error %v, want that of the side", err)
	}
}

// The two parts of a bare measurement: every message that is published is taken.
func TestParts(t *testing.T) {
	ctx, cancel := context.WithCancel(t.Context())
	var all sync.WaitGroup
	defer all.Wait()
	defer cancel()
	read, write := io.Pipe()
	all.Go(func() {
		err := Part(ctx, []string{"subscribe", "", "rigs/r/senml", "200"}, write)
		write.CloseWithError(errors.Join(err, io.EOF))
	})
	says := bufio.NewScanner(read)
	url, err := heard(says, "at")
	if err != nil {
		t.Fatal(err)
	}
	text, err := json.Marshal([]decode.Reading{{Name: "a", Unit: "K", Value: 300}, {Name: "b", Unit: "Pa", Value: 1e5}})
	if err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(t.TempDir(), "readings.json")
	if err := os.WriteFile(file, text, 0o600); err != nil {
		t.Fatal(err)
	}
	var out strings.Builder
	if err := Part(ctx, []string{"publish", url, "rigs/r/senml", "200", "0", file}, &out); err != nil {
		t.Fatal(err)
	}
	if out.String() != "first\nsent\n" {
		t.Errorf("the publisher says %q", out.String())
	}
	if _, err := heard(says, "took"); err != nil {
		t.Error(err)
	}
	if s, err := usedBy(os.Getpid()); err != nil || !(s >= 0) {
		t.Errorf("processor time %v, %v", s, err)
	}
	cancel()
	go func() { _, _ = io.Copy(io.Discard, read) }()
}
