package calib_test

import (
	"testing"

	"throatwatch/monitor/calib"
)

// That a calibration holds through its due day, and that an expired one counts only with
// somebody's name to it, is common practice, no source.
func TestRecordState(t *testing.T) {
	due := calib.Record{Serial: "1", Expires: 100}
	waived := due
	waived.Waiver = calib.Waiver{Who: "M. Oduya", Why: "for information"}
	ending := waived
	ending.Waiver.Ends = 200
	for _, tt := range []struct {
		name string
		r    calib.Record
		t    int64
		want calib.RecordState
		word string
	}{
		{"nothing on file", calib.Record{}, 100, calib.NotOnFile, "not_on_file"},
		{"no due date", calib.Record{Serial: "1"}, 100, calib.NotOnFile, "not_on_file"},
		{"on its due day", due, 99, calib.InDate, "in_date"},
		{"the day after", due, 100, calib.Expired, "expired"},
		{"waived, in date", waived, 99, calib.InDate, "in_date"},
		{"waived", waived, 100, calib.Waived, "waived"},
		{"on the last day of the waiver", ending, 199, calib.Waived, "waived"},
		{"after it", ending, 200, calib.Expired, "expired"},
	} {
		if got := tt.r.State(tt.t); got != tt.want || got.String() != tt.word {
			t.Errorf("%s: %v, want %s", tt.name, got, tt.word)
		}
	}
}
