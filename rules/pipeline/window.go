package pipeline

import (
	"encoding/binary"

	"github.com/cespare/xxhash/v2"

	"throatwatch/ingest"
)

// windowSize is the number of messages over which a copy is recognised.
const windowSize = 200_000

// Window remembers the hashes of the last messages. A checkpoint leaves it out:
// it follows from the records before the checkpoint.
type Window struct {
	ring []uint64
	n    uint64            // hashes pushed
	last map[uint64]uint64 // hash → number of its newest push; never ranged over
}

// Push remembers a message and tells whether it was there already.
func (w *Window) Push(r *ingest.Record) bool {
	return w.push(messageHash(r))
}

func (w *Window) push(h uint64) bool {
	if w.last == nil {
		w.last = make(map[uint64]uint64)
	}
	if len(w.ring) < windowSize {
		w.ring = append(w.ring, h)
	} else {
		i := w.n % windowSize
		if old := w.ring[i]; w.last[old] == w.n-windowSize {
			delete(w.last, old)
		}
		w.ring[i] = h
	}
	_, seen := w.last[h]
	w.last[h] = w.n
	w.n++
	return seen
}

// append writes the hashes, oldest first.
func (w *Window) append(dst []byte) []byte {
	start := uint64(0)
	if w.n > windowSize {
		start = w.n - windowSize
	}
	for i := start; i < w.n; i++ {
		dst = binary.LittleEndian.AppendUint64(dst, w.ring[i%windowSize])
	}
	return dst
}

// load replaces the window by what append wrote.
func (w *Window) load(src []byte) {
	*w = Window{}
	for len(src) >= 8 {
		w.push(binary.LittleEndian.Uint64(src))
		src = src[8:]
	}
}

// messageHash identifies a message by topic and payload. Two of the 200 000 messages of
// a window share a 64-bit hash by chance once in 10⁹ windows.
func messageHash(r *ingest.Record) uint64 {
	var d xxhash.Digest
	d.Reset()
	_, _ = d.WriteString(r.Topic)
	_, _ = d.Write([]byte{0})
	_, _ = d.Write(r.Payload)
	return d.Sum64()
}
