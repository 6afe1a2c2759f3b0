package pipeline

import (
	"bytes"
	"encoding/binary"
	"encoding/gob"
	"fmt"

	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
	"throatwatch/rules/card"
)

// State is all that a step depends on besides its record. It is plain data: no
// maps, pointers or functions, so that a checkpoint of it is complete.
type State struct {
	Epoch     uint64 // boots
	N         uint64 // outcomes
	Seq       uint64 // number of the last record
	Host      int64  // host time of the last record, ns UTC
	Bundle    []byte // text of the configuration in force
	Second    int64  // host second of the last status
	HostJudge int64  // host time at which rules on the daemon itself were last judged
	Align     align.State
	Compute   compute.State
	Rules     rules.State
	Health    Health
	Left      int64 // host time of the last record before the last boot
	Booted    int64 // host time of the last boot
	Run       monitor.Run
	RunActive bool
	Runs      uint64 // runs ever
	OffSince  int64  // event time since when the phase is off, 0 = it is not
	KnownAt   int64  // event time at which the phase was known last
	Armed     bool   // an engine start begins a run; cleared when a run is ended by hand
	InForce   InForce
	Proposed  Action   // who brings the configuration of the next record
	Done      []string // ids of the last requests, so that a repeated one is done once
	Log       []Entry  // the last of the operator log, the oldest first
	Swaps     []Swap   // sensors that were exchanged, in the order of their entry
	Numbers   Numbering
	Trial     Trial  // of the run that is on
	Imported  bool   // the records are those of another data system: runs get no number of ours
	Checks    Checks // of the data system, before and after a run
	Card      card.State
	Gathering gathering // of the point that is being averaged
	window    Window
}

const requestsKept = 64

// silence gives for how long a source has been silent, ns of host time. While the daemon
// was away nobody was, unless silent already when it went.
func (s *State) silence(src *align.SourceState) int64 {
	if s.Left-src.Host > silent {
		return s.Host - src.Host
	}
	return s.Host - max(src.Host, s.Booted)
}

// Encode gives the state as bytes, for a checkpoint. A full one carries the hashes by
// which copies of messages are recognised; another carries those since the state was
// last encoded or decoded, and OpenReplay gathers the rest.
//
// Layout: length of the state (8 bytes, little endian), gob of the state, hashes.
func (s *State) Encode(full bool) ([]byte, error) {
	var b bytes.Buffer
	b.Write(make([]byte, 8))
	if err := gob.NewEncoder(&b).Encode(s); err != nil {
		return nil, fmt.Errorf("pipeline: state: %w", err)
	}
	out := b.Bytes()
	binary.LittleEndian.PutUint64(out, uint64(len(out)-8))
	if full {
		out = s.window.append(out, 0)
	} else {
		out = s.window.appendPart(out)
	}
	s.window.keep(s.Seq)
	return out, nil
}

// Decode is the inverse of Encode. Of a checkpoint that is not full the hashes are left out.
func Decode(b []byte) (*State, error) {
	state, hashes, err := cutState(b)
	if err != nil {
		return nil, err
	}
	s := &State{}
	if err := gob.NewDecoder(bytes.NewReader(state)).Decode(s); err != nil {
		return nil, fmt.Errorf("pipeline: state: %w", err)
	}
	s.window.load(wholeWindow(hashes))
	s.window.keep(s.Seq)
	return s, nil
}

// cutState cuts what Encode gave into the gob of the state and the hashes.
func cutState(b []byte) (state, hashes []byte, err error) {
	if len(b) < 8 {
		return nil, nil, fmt.Errorf("pipeline: state of %d bytes is cut", len(b))
	}
	size := binary.LittleEndian.Uint64(b)
	if size > uint64(len(b)-8) {
		return nil, nil, fmt.Errorf("pipeline: state of %d bytes is cut, %d are due", len(b)-8, size)
	}
	return b[8 : 8+size], b[8+size:], nil
}
