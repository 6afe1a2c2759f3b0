package align

// Format is the encoding of a payload.
type Format uint8

// The formats of an input.
const (
	FormatSenMLJSON Format = iota + 1
	FormatSenMLCBOR
	FormatLines
	FormatValue
)

// Input is a topic filter with the format of what arrives there.
type Input struct {
	Filter string
	Format Format
}

// Channel says how samples of a channel are found and how long one holds.
type Channel struct {
	ID    string
	Topic string // topic that carries it, "" = any input
	Name  string // name in the payload
	Hold  int64  // ns after which the newest sample is stale
}

// Config says how samples become scans.
type Config struct {
	Period    int64 // ns between scans
	Lateness  int64 // ns of host time to wait for a sample of a scan
	MaxFuture int64 // ns a sample may be ahead of host time before its clock is not believed
	MaxPast   int64 // ns a source may lag, in step with host time, before its clock is not believed
	Inputs    []Input
	Channels  []Channel
}
