package ingest

// Sample is one value as a payload carries it: a finite number with the name,
// unit and time its sender gave. Name and Unit alias a buffer of the decoder
// and are valid until its next call.
type Sample struct {
	Name  []byte
	Unit  []byte  // empty when the sender named none
	Time  int64   // ns UTC; NoTime when the payload carries none
	Value float64 // always finite
}

// NoTime is the time of a sample whose payload carries none.
const NoTime int64 = -1 << 63

// Reason says why a message or a sample was not used, or used with a doubt.
// Each has a counter; none stops the stream.
type Reason uint8

// The reasons, by which counters are kept.
const (
	ReasonNone           Reason = iota
	ReasonSyntax                // payload does not parse
	ReasonTooLarge              // payload or number of samples over the limit
	ReasonNotFinite             // NaN or infinity where a number is due
	ReasonNotNumber             // text, boolean or data value: not a sample
	ReasonUnknownTopic          // no input takes this topic
	ReasonUnknownChannel        // the rig file names no such channel
	ReasonUnit                  // unit not convertible to the channel's
	ReasonRetained              // retained delivery: last-known, never a sample
	ReasonDuplicate             // a copy of a message already taken
	ReasonLate                  // event time before a scan already computed
	ReasonFuture                // event time ahead of host time: receive time used
	ReasonPast                  // publisher's clock behind: receive time used
	ReasonMustUnderstand        // a SenML label ending in "_" that we do not know
	NumReasons
)

var reasonNames = [NumReasons]string{
	"none", "syntax", "too_large", "not_finite", "not_a_number", "unknown_topic", "unknown_channel",
	"unit", "retained", "duplicate", "late", "future", "past", "must_understand",
}

// String gives the reason as it stands in counters and metrics.
func (r Reason) String() string {
	if r < NumReasons {
		return reasonNames[r]
	}
	return "unknown"
}
