package access

import (
	"crypto/sha256"
	"net/netip"
	"strings"
	"time"
)

const (
	freeTries    = 5  // of a name from an address
	freeFrom     = 20 // of all names from an address
	firstWait    = time.Second
	longestWait  = 5 * time.Minute
	forgottenFor = 15 * time.Minute // without a failure
	// mostTries bounds the table. When it is full the oldest failure is forgotten.
	mostTries = 4096
)

// tries counts failed sign-ins by name and address, and by address alone, so that
// neither one password nor one name after the other can be tried fast, and nobody
// keeps another out from elsewhere.
type tries map[triesKey]*failures

// triesKey has a hash of the name, which bounds its size; zero for all names.
type triesKey struct {
	name    [sha256.Size]byte
	address string
}

type failures struct {
	n    int
	last time.Time
}

// network gives the part of an address that somebody has to himself: all of IPv4,
// 64 bits of IPv6.
func network(address string) string {
	a, err := netip.ParseAddr(address)
	if err != nil {
		return "" // all of these share one count
	}
	a = a.Unmap().WithZone("")
	if a.Is6() {
		if p, err := a.Prefix(64); err == nil {
			return p.String()
		}
	}
	return a.String()
}

func keys(name, address string) (both, from triesKey) {
	from.address = network(address)
	return triesKey{sha256.Sum256([]byte(strings.ToLower(name))), from.address}, from
}

// wait gives for how long no try is taken.
func (t tries) wait(name, address string, now time.Time) time.Duration {
	both, from := keys(name, address)
	return max(t[both].wait(freeTries, now), t[from].wait(freeFrom, now), 0)
}

// wait doubles from firstWait to longestWait with each failure beyond the free ones.
func (f *failures) wait(free int, now time.Time) time.Duration {
	if f == nil || f.n < free || now.Sub(f.last) >= forgottenFor {
		return 0
	}
	pause := longestWait
	if n := f.n - free; n < 9 {
		pause = min(firstWait<<n, longestWait)
	}
	return pause - now.Sub(f.last)
}

func (t tries) failed(name, address string, now time.Time) {
	both, from := keys(name, address)
	for _, k := range []triesKey{both, from} {
		f := t[k]
		if f == nil || now.Sub(f.last) >= forgottenFor {
			if f == nil && len(t) >= mostTries {
				t.makeRoom(now)
			}
			f = &failures{}
			t[k] = f
		}
		f.n++
		f.last = now
	}
}

// passed forgets the failures of a name from an address. Those of the address
// stay: who has one password must not get free tries for others.
func (t tries) passed(name, address string) {
	both, _ := keys(name, address)
	delete(t, both)
}

func (t tries) makeRoom(now time.Time) {
	var oldest triesKey
	var last time.Time
	for k, f := range t {
		if now.Sub(f.last) >= forgottenFor {
			delete(t, k)
		} else if last.IsZero() || f.last.Before(last) {
			oldest, last = k, f.last
		}
	}
	if len(t) >= mostTries {
		delete(t, oldest)
	}
}
