package ingest

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
)

// Kind tells what a record is. The zero value is invalid.
type Kind uint8

// The kinds of record. The payload of every kind but KindMessage and KindTick
// is a JSON object; its shape belongs to the stage that reads it.
const (
	KindInvalid    Kind = iota
	KindBoot            // a process took over: build, architecture, epoch
	KindConfig          // full text of the rig, rule and limit files
	KindMessage         // an MQTT message as received
	KindTick            // host time moved on without another record
	KindAction          // an operator's action
	KindConnect         // a broker session is up: Topic is its filter
	KindDisconnect      // a broker session is down: Topic is its filter
	KindClock           // the wall clock was stepped against the monotonic one
	KindHealth          // a part of the daemon changed between working and failed
	KindGap             // records before this one were stepped but not stored
	kindEnd
)

// Flags are the delivery flags of an MQTT message.
type Flags uint8

// The flags of a message. DUP proves nothing by itself [MQTT-3.3.1.1]: a broker
// may set it on a first delivery and a publisher's own resend arrives without.
const (
	FlagDuplicate Flags = 1 << iota
	FlagRetained
	FlagQoS1
)

// Record is one numbered input of the computation.
type Record struct {
	Seq     uint64 // 1, 2, 3 … without holes, over restarts too
	Host    int64  // ns UTC: max(previous, wall at boot + monotonic)
	Kind    Kind
	Flags   Flags
	Topic   string
	Payload []byte
}

// ErrRecord is returned when bytes do not hold a list of records.
var ErrRecord = errors.New("not a list of records")

// AppendRecords appends the encoding of records to dst. The records must have
// consecutive Seq and Host that never falls; Seq is not kept:
// the caller stores it beside the bytes and gives it to DecodeRecords.
//
// Layout, per record: kind byte, flags byte, uvarint host − previous host (the
// first: host itself), uvarint topic length + 1 and its bytes (0 = the
// topic of the previous record), uvarint length and bytes of payload.
func AppendRecords(dst []byte, records []Record) []byte {
	var host int64
	topic := ""
	for i := range records {
		r := &records[i]
		dst = append(dst, byte(r.Kind), byte(r.Flags))
		dst = binary.AppendUvarint(dst, uint64(r.Host-host))
		host = r.Host
		if r.Topic == topic {
			dst = append(dst, 0)
		} else {
			dst = binary.AppendUvarint(dst, uint64(len(r.Topic))+1)
			dst = append(dst, r.Topic...)
			topic = r.Topic
		}
		dst = binary.AppendUvarint(dst, uint64(len(r.Payload)))
		dst = append(dst, r.Payload...)
	}
	return dst
}

// DecodeRecords appends the records in src to dst; the first gets the number
// first. Payloads alias src. It returns ErrRecord, wrapped with the byte offset,
// when src is cut or damaged; the records before the damage are returned.
func DecodeRecords(dst []Record, first uint64, src []byte) ([]Record, error) {
	var host int64
	topic := ""
	rest := src
	bad := func(what string) error {
		return fmt.Errorf("record %d at byte %d: %s: %w", first, len(src)-len(rest), what, ErrRecord)
	}
	for len(rest) > 0 {
		if len(rest) < 2 {
			return dst, bad("cut header")
		}
		r := Record{Seq: first, Kind: Kind(rest[0]), Flags: Flags(rest[1])}
		if r.Kind == KindInvalid || r.Kind >= kindEnd {
			return dst, bad("unknown kind")
		}
		p := rest[2:]
		delta, n := binary.Uvarint(p)
		if n <= 0 || delta > uint64(math.MaxInt64-host) {
			return dst, bad("host time")
		}
		p = p[n:]
		host += int64(delta)
		r.Host = host
		size, n := binary.Uvarint(p)
		if n <= 0 || size > uint64(len(p)-n)+1 {
			return dst, bad("topic")
		}
		p = p[n:]
		if size > 0 {
			topic = string(p[:size-1])
			p = p[size-1:]
		}
		r.Topic = topic
		size, n = binary.Uvarint(p)
		if n <= 0 || size > uint64(len(p)-n) {
			return dst, bad("payload")
		}
		p = p[n:]
		r.Payload = p[:size:size]
		rest = p[size:]
		dst = append(dst, r)
		first++
	}
	return dst, nil
}
