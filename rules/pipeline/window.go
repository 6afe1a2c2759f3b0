package pipeline

import (
	"encoding/binary"

	"github.com/cespare/xxhash/v2"

	"throatwatch/ingest"
)

// windowSize is the number of messages over which a copy is recognised.
const windowSize = 200_000

// Window remembers the hashes of the last messages. A full checkpoint holds them all,
// another those since the checkpoint before it: all follow from the records, but
// those of half an hour take a second to read.
type Window struct {
	ring  []uint64
	n     uint64            // hashes pushed
	last  map[uint64]uint64 // hash → number of its newest push; never ranged over
	kept  uint64            // of the hashes pushed, those that the newest checkpoint and those before it hold
	since uint64            // record of that checkpoint
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

// append writes the hashes from number from on, as far as they are in the window,
// oldest first.
func (w *Window) append(dst []byte, from uint64) []byte {
	if w.n > windowSize {
		from = max(from, w.n-windowSize)
	}
	for i := from; i < w.n; i++ {
		dst = binary.LittleEndian.AppendUint64(dst, w.ring[i%windowSize])
	}
	return dst
}

// load replaces the window by hashes, oldest first.
func (w *Window) load(hashes []uint64) {
	n := min(len(hashes), windowSize)
	*w = Window{ring: make([]uint64, 0, n), last: make(map[uint64]uint64, n)}
	for _, h := range hashes[len(hashes)-n:] {
		w.push(h)
	}
}

// keep notes that a checkpoint of record seq holds what the window holds now.
func (w *Window) keep(seq uint64) { w.kept, w.since = w.n, seq }

// partMark begins the part of a window. A whole window is hashes alone, so that the
// number of its bytes divides by eight.
const partMark = 'p'

// appendPart writes the hashes since the newest checkpoint: mark, record of that
// checkpoint, hashes.
func (w *Window) appendPart(dst []byte) []byte {
	dst = append(dst, partMark)
	dst = binary.LittleEndian.AppendUint64(dst, w.since)
	return w.append(dst, w.kept)
}

// wholeWindow gives the hashes that append wrote; none of a part.
func wholeWindow(src []byte) []uint64 {
	if len(src)%8 != 0 {
		return nil
	}
	return words(src)
}

// windowPart is the inverse of appendPart; ok is false for anything else.
func windowPart(src []byte) (since uint64, hashes []uint64, ok bool) {
	if len(src)%8 != 1 || len(src) < 9 || src[0] != partMark {
		return 0, nil, false
	}
	return binary.LittleEndian.Uint64(src[1:]), words(src[9:]), true
}

func words(src []byte) []uint64 {
	out := make([]uint64, 0, len(src)/8)
	for ; len(src) >= 8; src = src[8:] {
		out = append(out, binary.LittleEndian.Uint64(src))
	}
	return out
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
