package monitor

// Scan is all channels of a rig aligned to one instant. Its slices have one
// entry per channel of the rig file and belong to the maker: copy to keep.
type Scan struct {
	N       uint64 // number of the scan since the first record
	T       int64  // end of its interval, event time, ns UTC
	Raw     []float64
	Value   []float64 // calibrated, SI, absolute pressures for gauge channels; NaN when not usable
	Quality []Quality
	Samples []uint16 // samples that fell into this scan
	Age     []int64  // ns from the newest sample to T; -1 when there is none
	Finding []Finding
}

// NewScan gives a scan with room for n channels.
func NewScan(n int) *Scan {
	return &Scan{
		Raw: make([]float64, n), Value: make([]float64, n), Quality: make([]Quality, n),
		Samples: make([]uint16, n), Age: make([]int64, n), Finding: make([]Finding, n),
	}
}

// Run is one recorded period of testing.
type Run struct {
	ID      string `json:"id"`
	Number  uint64 `json:"number"`
	Rig     string `json:"rig"`
	Engine  string `json:"engine"`  // model and serial
	Started int64  `json:"started"` // event time, ns UTC
	Ended   int64  `json:"ended"`   // 0 while it goes on
	By      string `json:"by"`      // "engine" or the operator who started it
	Alarms  int    `json:"alarms"`  // raised so far, each time that one was

	Designation  string `json:"designation"`   // number by the rig file's scheme, "" = none
	Series       string `json:"series"`        // of Designation: the same with a place for the number
	InSeries     uint64 `json:"in_series"`     // the number, from 1
	Test         string `json:"test"`          // that it belongs to
	Purpose      string `json:"purpose"`       //
	EngineBuild  string `json:"engine_build"`  // build standard
	NozzleSerial string `json:"nozzle_serial"` //
	FuelBatch    string `json:"fuel_batch"`    //
	Aborted      bool   `json:"aborted"`       // ended: its start did not reach idle
}

// Mark is a note that an operator pins to the run's time line.
type Mark struct {
	T    int64  `json:"-"`
	Text string `json:"text"`
	By   string `json:"by"`
}
