package rules

import (
	"slices"
	"strings"
	"testing"
)

// Every default rule refers to a procedure of the facility: to one that is named, or
// with a blank to be seen.
func TestProcedures(t *testing.T) {
	list := Default(AllEquipment())
	keys := Situations(list)
	for _, key := range []string{"over_temperature", "hot_start", "hung_start", "flame_out", "lost_egt_indication", "lost_instrumentation"} {
		if !slices.Contains(keys, key) {
			t.Errorf("no situation %q in %q", key, keys)
		}
	}
	NameProcedures(list, func(key string) string {
		if key == "over_temperature" {
			return "EP-10"
		}
		return ""
	})
	var unnamed []string
	for i := range list {
		r := &list[i]
		key, blank := Unnamed(r.Response)
		switch {
		case blank:
			if !slices.Contains(unnamed, key) {
				unnamed = append(unnamed, key)
			}
		case r.Response != "Follow facility procedure EP-10 for over-temperature.":
			t.Errorf("%s: %q", r.Name, r.Response)
		}
		if err := CheckText(r.Response); err != nil {
			t.Errorf("%s: %v", r.Name, err)
		}
	}
	if want := slices.DeleteFunc(keys, func(k string) bool { return k == "over_temperature" }); !slices.Equal(unnamed, want) {
		t.Errorf("without a procedure %q, want %q", unnamed, want)
	}
	// The alarm of a rule that cannot be judged refers to the same procedure as the
	// other rules on instrumentation.
	set, faults := Compile(list, testNamesOf(t, list))
	if set == nil {
		t.Fatal(faults)
	}
	for i := set.Len(); i < len(set.rules); i++ {
		if got := set.rules[i].Response; got != "Follow facility procedure ___ for lost instrumentation." {
			t.Errorf("%s: %q", set.rules[i].Name, got)
		}
	}
	if len(set.rules) == set.Len() {
		t.Error("no default rule tells that it cannot be judged")
	}
}

// testNamesOf gives an environment with the bands that default rules name.
func testNamesOf(t *testing.T, list []Rule) []Name {
	t.Helper()
	var bands []string
	for i := range list {
		if band, ok := strings.CutPrefix(list[i].When, "egt."); ok {
			band, _, _ = strings.Cut(band, ".")
			if !slices.Contains(bands, band) {
				bands = append(bands, band)
			}
		}
	}
	return StandardNames(testChannels(), bands)
}
