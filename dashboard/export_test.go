package dashboard

import (
	"net/url"

	"throatwatch/rules/pipeline"
)

// Bounds that tests go to.
const (
	Resumable   = resumable
	ClientQueue = clientQueue
	MaxViewers  = maxViewers
	MaxNames    = maxNames
	MaxPoints   = maxPoints
	LargestBody = largestBody

	CloseSignedOut = closeSignedOut
)

// Patterns gives what the server answers beside the page.
func (s *Server) Patterns() []string {
	var patterns []string
	for p := range s.routes() {
		patterns = append(patterns, p)
	}
	return patterns
}

// EncodeStored gives the frame of an outcome as a viewer with all channels gets it.
func EncodeStored(o *pipeline.Outcome, cfg *pipeline.Config) ([]byte, bool) {
	return appendStored(nil, o, cfg)
}

// EncodeChannels gives the frame of some channels, by index.
func EncodeChannels(o *pipeline.Outcome, cfg *pipeline.Config, wanted []int) []byte {
	return appendChannels(nil, o, cfg, wanted)
}

// AppendFrame is EncodeFrame into a buffer.
func AppendFrame(dst []byte, o *pipeline.Outcome, cfg *pipeline.Config) ([]byte, string, bool) {
	return appendFrame(dst, o, cfg)
}

// ParseFrom reads epoch.n.
func ParseFrom(from string) (epoch, n uint64, err error) { return parseFrom(from) }

// Stretch reads from and to.
func Stretch(q url.Values, started int64) (from, to int64, err error) { return stretch(q, started) }

// SeriesQuery reads names and points.
func SeriesQuery(q url.Values) (names []string, points int, err error) { return seriesQuery(q) }

// NewPlot tells where the column of a name is, its unit and whether it is a state.
func NewPlot(name string, cfg *pipeline.Config) (kind, unit string, state bool, err error) {
	p, err := newPlot(name, cfg, 0, 1, 1)
	if err != nil {
		return "", "", false, err
	}
	return p.kind, p.unit, p.state != nil, nil
}

// NewViewer reads what a viewer asks for; every is the least time between points, ns.
func NewViewer(q url.Values) (every int64, err error) {
	v, err := newViewer(q)
	if err != nil {
		return 0, err
	}
	return v.every, nil
}

// Attach enters viewers without a connection; each has every frame, and the channels
// if it asks for them. drain takes what waits for them and tells how much it was.
func (h *Hub) Attach(n int, channels bool) (drain func() (frames int)) {
	all := make([]*viewer, n)
	for i := range all {
		all[i] = &viewer{all: channels, queue: make(chan queued, clientQueue), gone: make(chan struct{})}
		h.viewers[all[i]] = struct{}{}
	}
	return func() (frames int) {
		for _, v := range all {
			for len(v.queue) > 0 {
				<-v.queue
				frames++
			}
		}
		return frames
	}
}

// HoldExport takes the place of an export under way until release is called.
func (s *Server) HoldExport() (release func()) {
	s.exporting <- struct{}{}
	return func() { <-s.exporting }
}
