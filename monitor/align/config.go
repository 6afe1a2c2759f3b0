package align

import (
	"throatwatch/ingest/decode"
	"throatwatch/monitor/unit"
)

// Input is a topic filter with the format of what arrives there. A filter may
// hold the MQTT wildcards + and #.
type Input struct {
	Filter string
	Format decode.Format
}

// Channel says how samples of a channel are found and how long one holds.
type Channel struct {
	ID    string
	Topic string    // the one topic that carries it, "" = any input
	Name  string    // name in the payload
	Raw   unit.Unit // unit that its raw values are kept in
	Hold  int64     // ns after which the newest sample is stale
}

// Config says how samples become scans.
type Config struct {
	Period    int64 // ns between scans
	Lateness  int64 // ns of host time to wait for a sample of a scan
	MaxFuture int64 // ns a sample may be ahead of host time before its clock is not believed
	MaxPast   int64 // ns a source may lag, in step with host time, before its clock is not believed
	Backlog   int64 // ns of host time after a connect in which a broker may still deliver its backlog
	Inputs    []Input
	Channels  []Channel
}
