package pair

import (
	"fmt"
	"sync"
	"time"
)

const (
	// beatEvery is how often each watch says that it is there.
	beatEvery = time.Second
	// holdFor is how long a watch may speak after it sent a beat that came back to it:
	// less than takeAfter, which counts from when the other hears that beat.
	holdFor = 2500 * time.Millisecond
	// takeAfter is the silence of the one that speaks after which another does.
	takeAfter = 3 * time.Second
	// beatsKept is how many beats may be on their way to the broker and back.
	beatsKept = 8
)

// Standing tells how a watch stands to the other.
type Standing struct {
	Speaks bool      // this one
	Name   string    // who speaks; "" = nobody that is heard
	Since  time.Time // it does; zero where nobody does
	Other  string    // the other watch; "" = none is heard
	Why    string    // this one cannot speak; "" = it could
}

// lease decides which of two watches speaks. It is told the time by its caller and
// may be used by several goroutines.
//
// What it relies on: a watch speaks only while its own beats come back to it from the
// broker, so one that is cut off, deaf or stopped falls silent by its own clock before
// the other takes over. Two that speak, each at its own part of a broken cluster, hear
// each other when it heals: the older epoch yields, of equal ones the lower name.
type lease struct {
	name, life string

	mu        sync.Mutex // protects the fields below
	epoch     uint64     // the highest that is known
	mine      beat       // the newest; Epoch and Since are those of its own speaking
	speaking  bool
	listening time.Time // since when its beats have come back without a break
	confirmed time.Time // when the newest beat that came back was sent
	sent      [beatsKept]struct {
		stamp int64
		at    time.Time
	}
	beats    int
	last     time.Time // of sending
	other    beat      // newest of another watch
	heard    time.Time // other
	speaker  beat      // newest of another watch that speaks
	speaksAt time.Time // speaker was heard; zero: it has gone or fallen silent
	twin     bool      // another process has this one's name
}

func newLease(name, life string) *lease {
	return &lease{name: name, life: life, mine: beat{Name: name, Life: life}}
}

// answered tells that the broker answers.
func (l *lease) answered(now time.Time) bool {
	return !l.confirmed.IsZero() && now.Sub(l.confirmed) <= holdFor
}

// Speaks tells whether this watch may speak now.
func (l *lease) Speaks(now time.Time) bool {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.speaking && l.answered(now)
}

// Behind gives how long ago the oldest alarm came about that the webhook of the one that
// spoke last had not delivered.
func (l *lease) Behind() time.Duration {
	l.mu.Lock()
	defer l.mu.Unlock()
	return time.Duration(l.speaker.Behind)
}

// Standing gives how it stands.
func (l *lease) Standing(now time.Time) Standing {
	l.mu.Lock()
	defer l.mu.Unlock()
	var s Standing
	if !l.heard.IsZero() && now.Sub(l.heard) < takeAfter {
		s.Other = l.other.Name
	}
	switch {
	case !l.answered(now):
		s.Why = "the broker does not answer"
	case l.twin:
		s.Why = fmt.Sprintf("another watch is called %q too", l.name)
	}
	switch {
	case l.speaking && l.answered(now):
		s.Speaks, s.Name, s.Since, s.Why = true, l.name, time.Unix(0, l.mine.Since), ""
	case l.answered(now) && !l.speaksAt.IsZero() && now.Sub(l.speaksAt) < takeAfter:
		s.Name, s.Since = l.speaker.Name, time.Unix(0, l.speaker.Since)
	}
	return s
}

// tick takes over where that is due and gives the beat to be sent, if one is.
// wall is the time of the wall clock, ns UTC.
func (l *lease) tick(now time.Time, wall int64, behind time.Duration) (b beat, due bool) {
	l.mu.Lock()
	defer l.mu.Unlock()
	answered := l.answered(now)
	if !answered {
		l.listening = time.Time{}
	}
	take := !l.speaking && answered && now.Sub(l.listening) >= takeAfter &&
		(l.speaksAt.IsZero() || now.Sub(l.speaksAt) >= takeAfter)
	if take {
		l.epoch++
		l.speaking = true
		l.mine.Epoch, l.mine.Since = l.epoch, wall
	}
	if !take && !l.last.IsZero() && now.Sub(l.last) < beatEvery {
		return beat{}, false
	}
	l.last = now
	b = beat{
		Name: l.name, Life: l.life, Renewed: max(wall, l.mine.Renewed+1), Epoch: l.epoch,
		Speaks: l.speaking && answered, Behind: int64(behind),
	}
	if l.speaking {
		b.Epoch, b.Since = l.mine.Epoch, l.mine.Since
	}
	l.mine.Renewed = b.Renewed
	slot := &l.sent[l.beats%beatsKept]
	slot.stamp, slot.at = b.Renewed, now
	l.beats++
	return b, true
}

// hear takes a beat in. One that was retained tells who spoke and not that it does.
func (l *lease) hear(b *beat, retained bool, now time.Time) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.epoch = max(l.epoch, b.Epoch)
	switch {
	case b.Life == l.life:
		if !retained && !b.Gone {
			l.echo(b.Renewed, now)
		}
		return
	case b.Gone:
		if b.Life == l.speaker.Life {
			l.speaksAt = time.Time{}
		}
		if b.Life == l.other.Life {
			l.heard = time.Time{}
		}
		return
	case retained:
		if b.Speaks && l.speaking && l.mine.order(b) < 0 {
			l.speaking = false
		}
		return
	case b.Life == l.other.Life && b.Renewed <= l.other.Renewed:
		return // heard before: whoever says it again is not that watch
	}
	l.twin = b.Name == l.name
	l.other, l.heard = *b, now
	if !b.Speaks {
		if b.Life == l.speaker.Life {
			l.speaksAt = time.Time{}
		}
		return
	}
	l.speaker, l.speaksAt = *b, now
	if l.speaking && l.mine.order(b) < 0 {
		l.speaking = false
	}
}

// echo notes that an own beat came back.
func (l *lease) echo(stamp int64, now time.Time) {
	for i := range l.sent {
		if l.sent[i].stamp != stamp || l.sent[i].at.Before(l.confirmed) {
			continue
		}
		if !l.answered(now) {
			l.listening = now
		}
		l.confirmed = l.sent[i].at
	}
}

// farewell is what the broker says for this watch when it is gone.
func (l *lease) farewell(wall int64) beat {
	return beat{Name: l.name, Life: l.life, Renewed: wall, Gone: true}
}
