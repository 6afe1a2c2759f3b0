package dashboard

import (
	"time"

	"throatwatch/rules/pipeline"
)

// Speaking tells how a watch of a pair stands to the other. It is no part of what is
// computed or recorded: frames of a stored run have none.
type Speaking struct {
	Watch string     `json:"watch"` // this one
	Name  *string    `json:"name"`  // the one that speaks; nil: none is heard
	Since *time.Time `json:"since"` // it does
	Other *string    `json:"other"` // the other one; nil: it is not heard
	Why   string     `json:"why"`   // this one cannot speak; "" = it could
}

// WithSpeaking gives a status frame with one more member, speaking.
func WithSpeaking(status []byte, s Speaking) []byte {
	return append(member(status[:len(status)-1], "speaking", s), '}')
}

// speaks adds to a status frame how the watch stands to the other, where there is one.
func (h *Hub) speaks(status []byte) []byte {
	if h.Speaking == nil {
		return status
	}
	return WithSpeaking(status, h.Speaking())
}

// hello gives what a viewer is told first. Its last member is a status.
func (h *Hub) hello(m *pipeline.Machine, s *pipeline.State) []byte {
	b := appendHello(nil, m, s, newestScan(m, s), h.build)
	return append(h.speaks(b[:len(b)-1]), '}')
}
