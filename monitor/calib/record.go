package calib

// Record is what is on file of the sensor of a channel. The zero value is nothing.
type Record struct {
	Serial      string
	Certificate string
	Calibrated  string // date, YYYY-MM-DD
	Due         string // last day on which the calibration holds, YYYY-MM-DD; "" = not stated
	Expires     int64  // ns UTC: the end of that day at the facility; 0 = not stated
	Waiver      Waiver
}

// Waiver says who answers for the use of a sensor whose calibration has expired.
type Waiver struct {
	Who, Why string
	Until    string // last day, YYYY-MM-DD; "" = as long as it stands
	Ends     int64  // ns UTC: the end of that day at the facility; 0 = it does not end
}

// RecordState says how the calibration of a sensor stands.
type RecordState uint8

// The states of a calibration.
const (
	NotOnFile RecordState = iota // no due date is stated
	InDate
	Waived // expired, and somebody answers for it
	Expired
)

// String gives the word used in JSON.
func (s RecordState) String() string {
	switch s {
	case NotOnFile:
		return "not_on_file"
	case InDate:
		return "in_date"
	case Waived:
		return "waived"
	case Expired:
		return "expired"
	}
	return "invalid"
}

// State tells how the calibration stands at event time t, ns UTC.
func (r *Record) State(t int64) RecordState {
	switch w := &r.Waiver; {
	case r.Expires == 0:
		return NotOnFile
	case t < r.Expires:
		return InDate
	case w.Who != "" && (w.Ends == 0 || t < w.Ends):
		return Waived
	}
	return Expired
}
