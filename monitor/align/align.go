// Package align turns messages into scans: it finds the channel of every
// sample, judges the clock of its source, and brings all channels to common
// instants of event time.
//
// Scan k covers the interval (T−Period, T]; T is a multiple of Period. The raw
// value of a channel in a scan is the mean of its samples in the interval, else
// its last one while that is younger than the hold time. Every sample that is
// used falls into exactly one scan.
//
// A scan is closed by the record that makes it complete: every channel that has
// lately been in each scan has a sample at or after T. A channel that fails to
// come is waited for until Lateness has passed in host time; so is every scan for
// a while after samples of a channel came out of order.
//
// While no session is connected scans wait: what the broker keeps will still
// come. While that backlog comes in after a connect, Lateness counts in event
// time, by the source that is furthest behind: several sessions bring theirs in
// turns. Once a source is live again the others are waited for at most
// gatherFor after the connect.
//
// A sample of a scan that is closed already goes into the oldest open one if it
// is late by no more than Lateness, or if it is the newest of its channel and
// younger than the hold time: a slow channel from a slow source must not go
// stale because fast ones close scans. Every other late sample is counted and
// not used. Nor is one that is further ahead of the oldest open scan than the
// table may grow; it is counted as one of the future.
//
// The clock of a source is not believed when it is ahead of ours, was never set,
// or lags in step with ours by so much that its samples come too late. Its
// samples count at receive time then.
//
// All that depends on past records is in State; an Aligner holds only what
// follows from the configuration, and buffers.
package align

import (
	"maps"
	"math"
	"slices"
	"strings"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/unit"
)

const (
	slotsAtFirst = 64                 // open intervals kept before the table grows
	slotsAtMost  = 1 << 14            // 13 min at 20 scans/s, and no more
	bridge       = int64(120e9)       // a gap without any data that is longer makes no scans
	streakFull   = 4                  // scans in a row that make a channel expected
	patience     = int64(10e9)        // host time for which scans wait after samples came out of order
	settle       = int64(2e9)         // host time without a sample of the past that ends a backlog, or of an expected channel after a connect
	gatherFor    = int64(10e9)        // host time after a connect for which live sources wait for those behind
	suspectFor   = int64(3e9)         // host time over which a lagging clock is compared with ours
	jumpFor      = int64(150e6)       // the same for a clock that jumped back while its source was live
	neverSet     = int64(946684800e9) // 2000-01-01: a clock before it was never set
	orderKept    = 1024               // samples of a message whose channels are remembered
	largest      = 1e290              // a raw value beyond it is none; below it no mean overflows
)

// Acc gathers the samples of one channel in one interval.
type Acc struct {
	Sum    float64
	Newest int64 // event time of the newest sample, its host time for a clock not believed
	N      uint32
}

// ChannelState is what is remembered of a channel between scans.
type ChannelState struct {
	Last   float64 // raw value of its last interval with samples
	Time   int64   // event time of the newest sample in a closed scan
	Newest int64   // event time of the newest sample at all
	Streak uint8
	Seen   bool
}

// SourceState is what is remembered of a source: one topic.
type SourceState struct {
	Topic        string
	Messages     uint64
	Host         int64 // host time of its newest message
	Skew         int64 // host time − its own clock at its newest sample, ns; to 1970 at most
	Event        int64 // time at which its newest sample counts
	Hold         int64 // shortest hold time of its channels, 0 = not known
	Skewed       bool  // clock not believed: host time is used
	SuspectHost  int64 // start of the comparison, 0 = none
	SuspectEvent int64
	Jumped       bool // the comparison began with a jump back
}

// State is all that alignment depends on besides the record and the
// configuration. It is plain data.
type State struct {
	Next     int64  // end of the oldest open interval, 0 = no sample yet
	N        uint64 // scans closed
	Base     int    // row of the oldest open interval in Table
	Rows     int    // rows of Table
	Table    []Acc  // Rows × channels, a ring of rows
	MaxEvent int64  // newest time at which a sample counts, not ahead of host time
	Backlog  int64  // host time until which a backlog is expected, 0 = none
	Up       int64  // host time of the newest connect
	Heard    bool   // data has come since the newest boot or connect
	Patient  int64  // host time until which scans wait for samples out of order
	Sessions []Session
	Channels []ChannelState
	Sources  []SourceState
	Messages uint64
	Samples  uint64
	Skipped  uint64 // scans left out over a gap with no data at all
	Counters [ingest.NumReasons]uint64
}

// Session is a broker session, known by its topic filter.
type Session struct {
	Filter    string
	Connected bool
}

// topicInfo is what the configuration says of one topic.
type topicInfo struct {
	input  int // index of Config.Inputs, -1 = none takes it
	byName map[string]int
	only   int   // the one channel of a value topic, -1 = go by name
	order  []int // channel of each sample of the newest message, −1 = none: senders keep to one order
}

// Aligner applies a configuration. It belongs to one goroutine.
type Aligner struct {
	cfg     Config
	decoder *decode.Decoder
	shared  map[string]int // channels found by name on any input
	topics  map[string]*topicInfo
	sent    []unit.Unit // of each channel the first unit that was sent and is not its own, by the name it was sent with
}

// New gives an aligner. The configuration must be valid: Period > 0, names
// unique per topic, every filter an MQTT filter.
func New(cfg Config) *Aligner {
	a := &Aligner{
		cfg:     cfg,
		decoder: decode.New(decode.Limits{}),
		shared:  make(map[string]int, len(cfg.Channels)),
		topics:  map[string]*topicInfo{},
		sent:    make([]unit.Unit, len(cfg.Channels)),
	}
	for i, c := range cfg.Channels {
		if c.Topic == "" {
			a.shared[c.Name] = i
		}
	}
	return a
}

// Reset fits the state to the configuration, which was from before: a channel
// with the same raw values keeps its past and its samples in open scans. Samples
// of one that is gone are counted as of an unknown channel.
func (a *Aligner) Reset(s *State, from []Channel) {
	n := len(a.cfg.Channels)
	old := *s
	s.Channels = make([]ChannelState, n)
	s.Base, s.Rows = 0, slotsAtFirst
	s.Table = make([]Acc, s.Rows*n)
	if s.Next != 0 {
		s.Next = ceil(s.Next, a.cfg.Period)
	}
	s.Sessions = slices.DeleteFunc(s.Sessions, func(se Session) bool {
		return !slices.ContainsFunc(a.cfg.Inputs, func(in Input) bool { return in.Filter == se.Filter })
	})
	for i := range s.Sources {
		s.Sources[i].Hold = 0
	}
	for j := range min(len(from), len(old.Channels)) {
		i := slices.IndexFunc(a.cfg.Channels, func(c Channel) bool { return c.ID == from[j].ID && c.Raw == from[j].Raw })
		if i >= 0 {
			s.Channels[i] = old.Channels[j]
		}
		for k := range old.Rows {
			acc := old.Table[(old.Base+k)%old.Rows*len(old.Channels)+j]
			switch {
			case acc.N == 0:
			case i < 0:
				s.Counters[ingest.ReasonUnknownChannel] += uint64(acc.N)
			default:
				// The same row, but for another period.
				row := max(0, (acc.Newest-(s.Next-a.cfg.Period)-1)/a.cfg.Period)
				to := a.slot(s, i, min(row, slotsAtMost-1))
				to.Sum += acc.Sum
				to.N += acc.N
				to.Newest = max(to.Newest, acc.Newest)
			}
		}
	}
}

// topic looks a topic up, and remembers what it found.
func (a *Aligner) topic(topic string) *topicInfo {
	if info, ok := a.topics[topic]; ok {
		return info
	}
	info := &topicInfo{input: -1, byName: a.shared, only: -1}
	for i, in := range a.cfg.Inputs {
		if Match(in.Filter, topic) {
			info.input = i
			break
		}
	}
	own := 0
	for _, c := range a.cfg.Channels {
		if c.Topic == topic {
			own++
		}
	}
	if own > 0 {
		info.byName = make(map[string]int, len(a.shared)+own)
		maps.Copy(info.byName, a.shared)
		for i, c := range a.cfg.Channels {
			if c.Topic == topic {
				info.byName[c.Name] = i
				if own == 1 && info.input >= 0 && a.cfg.Inputs[info.input].Format == decode.Value {
					info.only = i
				}
			}
		}
	}
	if len(a.topics) < 1<<14 { // a flood of invented topics must not fill the memory
		a.topics[topic] = info
	}
	return info
}

// Match tells whether an MQTT topic filter takes a topic [MQTT-4.7].
func Match(filter, topic string) bool {
	if strings.HasPrefix(topic, "$") != strings.HasPrefix(filter, "$") {
		return false
	}
	for {
		f, fRest, fMore := strings.Cut(filter, "/")
		if f == "#" {
			return true
		}
		t, tRest, tMore := strings.Cut(topic, "/")
		if f != "+" && f != t {
			return false
		}
		switch {
		case !fMore && !tMore:
			return true
		case fMore && !tMore:
			return fRest == "#"
		case !fMore:
			return false
		}
		filter, topic = fRest, tRest
	}
}

// Message takes one message. It gives the decoder's result, for the quarantine;
// samples of it are already in the table.
func (a *Aligner) Message(s *State, r *ingest.Record, seen bool) *decode.Result {
	s.Messages++
	info := a.topic(r.Topic)
	if info.input < 0 {
		s.Counters[ingest.ReasonUnknownTopic]++
		return nil
	}
	if r.Flags&ingest.FlagRetained != 0 {
		s.Counters[ingest.ReasonRetained]++
		return nil
	}
	res := a.decoder.Decode(a.cfg.Inputs[info.input].Format, r.Topic, r.Payload, r.Host)
	if seen && (res.DeviceTime || r.Flags&ingest.FlagDuplicate != 0) {
		s.Counters[ingest.ReasonDuplicate]++
		return nil
	}
	for reason, n := range res.Faults {
		s.Counters[reason] += uint64(n)
	}
	if len(res.Samples) == 0 {
		return res
	}
	src := s.source(r.Topic)
	src.Messages++
	src.Host = r.Host
	s.Heard = true
	for i := range res.Samples {
		a.sample(s, src, info, i, &res.Samples[i], r.Host)
	}
	return res
}

func (s *State) source(topic string) *SourceState {
	for i := range s.Sources {
		if s.Sources[i].Topic == topic {
			return &s.Sources[i]
		}
	}
	const most = 1024 // sources beyond it share the last entry
	if len(s.Sources) == most {
		return &s.Sources[most-1]
	}
	s.Sources = append(s.Sources, SourceState{Topic: topic})
	return &s.Sources[len(s.Sources)-1]
}

func (a *Aligner) sample(s *State, src *SourceState, info *topicInfo, i int, sm *ingest.Sample, host int64) {
	ch, v, why := a.value(info, i, sm)
	if why != ingest.ReasonNone {
		s.Counters[why]++
		return
	}
	c := &a.cfg.Channels[ch]
	if src.Hold == 0 || c.Hold < src.Hold {
		src.Hold = c.Hold
	}
	t := host
	if sm.Time != ingest.NoTime {
		t = a.eventTime(s, src, sm.Time, host)
	}
	src.Event = t
	s.MaxEvent = max(s.MaxEvent, min(t, host))
	if s.Backlog != 0 {
		a.settle(s, src, host)
	}
	a.place(s, ch, t, host, v)
}

// value gives the channel of sample i of a message, −1 for none, and its raw value in
// the raw unit of the channel; or why it cannot be used, with the value as it was sent.
func (a *Aligner) value(info *topicInfo, i int, sm *ingest.Sample) (ch int, v float64, why ingest.Reason) {
	ch, ok := info.channel(a.cfg.Channels, i, sm.Name)
	if !ok {
		return -1, sm.Value, ingest.ReasonUnknownChannel
	}
	c := &a.cfg.Channels[ch]
	v = sm.Value
	if len(sm.Unit) > 0 && string(sm.Unit) != c.Raw.Name {
		u := &a.sent[ch]
		if string(sm.Unit) != u.Name {
			known, ok := unit.Lookup(sm.Unit)
			if !ok || known.Dimension != c.Raw.Dimension {
				return ch, v, ingest.ReasonUnit
			}
			if u.Name == "" {
				*u, u.Name = known, string(sm.Unit)
			}
			v = c.Raw.FromSI(known.ToSI(v))
		} else {
			v = c.Raw.FromSI(u.ToSI(v))
		}
	}
	if !(math.Abs(v) < largest) {
		return ch, sm.Value, ingest.ReasonNotFinite
	}
	return ch, v, ingest.ReasonNone
}

// channel finds the channel of sample i of a message by its name.
func (info *topicInfo) channel(channels []Channel, i int, name []byte) (ch int, ok bool) {
	if info.only >= 0 {
		return info.only, true
	}
	if i < len(info.order) {
		if ch = info.order[i]; ch >= 0 && channels[ch].Name == string(name) {
			return ch, true
		}
	}
	if ch, ok = info.byName[string(name)]; !ok {
		ch = -1
	}
	switch {
	case i < len(info.order):
		info.order[i] = ch
	case i < orderKept:
		info.order = append(info.order, ch)
	}
	return ch, ok
}

// Read decodes a message and calls fn with each of its samples: the channel, −1
// for none, its raw value in the raw unit of the channel, and why it is not used.
// It takes nothing into a state, so what depends on one, such as being late, is
// not told. Seen tells that a copy of the message came before.
func (a *Aligner) Read(r *ingest.Record, seen bool, fn func(sm *ingest.Sample, ch int, raw float64, why ingest.Reason)) {
	info := a.topic(r.Topic)
	if info.input < 0 {
		return
	}
	res := a.decoder.Decode(a.cfg.Inputs[info.input].Format, r.Topic, r.Payload, r.Host)
	for i := range res.Samples {
		sm := &res.Samples[i]
		ch, v, why := a.value(info, i, sm)
		switch {
		case why != ingest.ReasonNone:
		case r.Flags&ingest.FlagRetained != 0:
			why = ingest.ReasonRetained
		case seen && (res.DeviceTime || r.Flags&ingest.FlagDuplicate != 0):
			why = ingest.ReasonDuplicate
		}
		fn(sm, ch, v, why)
	}
}

// eventTime gives the time at which a sample counts: its own, or host time when
// the clock of its source cannot be believed. A clock ahead of ours is wrong. A
// clock behind is a backlog if it catches up with ours, and wrong if it runs in
// step with ours: that takes suspectFor to tell. If it jumped back, and nothing live
// comes any more, it takes jumpFor: a backlog goes on from where its source was cut
// off, and nobody should be blind for seconds because a clock was set.
func (a *Aligner) eventTime(s *State, src *SourceState, t, host int64) int64 {
	src.Skew = host - max(t, 0)
	limit := a.lag(src)
	switch {
	case t < neverSet, src.Skew < -a.cfg.MaxFuture:
		src.Skewed = true
	case src.Skew <= limit:
		if !src.Skewed || src.Skew <= limit/2 && src.Skew >= -a.cfg.MaxFuture/2 {
			src.Skewed, src.SuspectHost = false, 0
		}
	case src.Skewed:
	case src.SuspectHost == 0:
		src.SuspectHost, src.SuspectEvent = host, t
		src.Jumped = s.Backlog == 0 && t < src.Event-limit
	case host-src.SuspectHost >= suspectFor, src.Jumped && host-src.SuspectHost >= jumpFor:
		pace := float64(t-src.SuspectEvent) / float64(host-src.SuspectHost)
		src.Skewed = pace < 1.5
		src.SuspectHost, src.SuspectEvent = host, t
	}
	switch {
	case !src.Skewed:
		return t
	case src.Skew < 0:
		s.Counters[ingest.ReasonFuture]++
	default:
		s.Counters[ingest.ReasonPast]++
	}
	return host
}

// lag gives by how much a live source may be behind: beyond it the samples of its
// fastest channel come too late for every scan.
func (a *Aligner) lag(src *SourceState) int64 {
	return min(a.cfg.MaxPast, a.cfg.Lateness+src.Hold)
}

// behind tells whether what a source brings is a backlog, as far as it can be told
// from a wrong clock.
func (a *Aligner) behind(src *SourceState) bool {
	return !src.Skewed && src.Host-src.Event > a.lag(src)
}

// settle moves the end of an expected backlog: a sample of the past says that
// more will come, one of now that there may be none.
func (a *Aligner) settle(s *State, src *SourceState, host int64) {
	if a.behind(src) {
		s.Backlog = max(s.Backlog, host+settle)
	} else {
		s.Backlog = min(s.Backlog, host+settle)
	}
}

// place puts a value into the interval of its time.
func (a *Aligner) place(s *State, ch int, t, host int64, v float64) {
	p := a.cfg.Period
	if s.Next == 0 {
		s.Next = ceil(min(t, host), p)
	}
	cs := &s.Channels[ch]
	if t < cs.Newest {
		s.Patient = host + patience
	}
	row := int64(0)
	if late := s.Next - p - t; late >= 0 {
		if late > a.cfg.Lateness && (t <= cs.Newest || late > a.cfg.Channels[ch].Hold) {
			s.Counters[ingest.ReasonLate]++
			return
		}
	} else {
		if s.Backlog == 0 {
			a.skip(s, t)
		}
		if t > s.Next {
			row = (t - (s.Next - p) - 1) / p
		}
	}
	cs.Newest = max(cs.Newest, t)
	if row >= slotsAtMost {
		s.Counters[ingest.ReasonFuture]++
		return
	}
	acc := a.slot(s, ch, row)
	acc.Sum += v
	acc.N++
	acc.Newest = max(acc.Newest, t)
	s.Samples++
}

// slot gives the place of a channel in row after the oldest open one.
func (a *Aligner) slot(s *State, ch int, row int64) *Acc {
	for int64(s.Rows) <= row {
		a.grow(s)
	}
	at := s.Base + int(row)
	if at >= s.Rows {
		at -= s.Rows
	}
	return &s.Table[at*len(a.cfg.Channels)+ch]
}

// empty tells whether the row k after the oldest open one has no sample.
func (s *State) empty(k int) bool {
	n := len(s.Channels)
	row := s.Table[(s.Base+k)%s.Rows*n:][:n]
	for i := range row {
		if row[i].N > 0 {
			return false
		}
	}
	return true
}

// skip leaves out the scans of a gap without any data, if it is longer than
// bridge, up to the first sample or else to the time t.
func (a *Aligner) skip(s *State, t int64) {
	p := a.cfg.Period
	if t-s.Next <= bridge {
		return
	}
	k := 0
	for k < s.Rows && s.empty(k) {
		k++
	}
	next := s.Next + int64(k)*p
	if k == s.Rows {
		next = ceil(t, p)
	}
	if next-s.Next > bridge {
		s.Skipped += uint64((next - s.Next) / p)
		s.Next = next
		s.Base = (s.Base + k) % s.Rows
	}
}

// shrink gives the room back that a backlog has taken.
func (a *Aligner) shrink(s *State) {
	rows := s.Rows
	for rows > 0 && s.empty(rows-1) {
		rows--
	}
	if s.Rows == slotsAtFirst || rows > slotsAtFirst {
		return
	}
	n := len(s.Channels)
	table := make([]Acc, slotsAtFirst*n)
	for k := range rows {
		copy(table[k*n:], s.Table[(s.Base+k)%s.Rows*n:][:n])
	}
	s.Table, s.Base, s.Rows = table, 0, slotsAtFirst
}

func (a *Aligner) grow(s *State) {
	n := len(a.cfg.Channels)
	table := make([]Acc, 2*s.Rows*n)
	k := copy(table, s.Table[s.Base*n:])
	copy(table[k:], s.Table[:s.Base*n])
	s.Table, s.Base, s.Rows = table, 0, 2*s.Rows
}

// Connect notes that a session is up or down.
func (a *Aligner) Connect(s *State, filter string, up bool, host int64) {
	if up {
		s.Backlog, s.Up, s.Heard = host+a.cfg.Backlog, host, false
	}
	for i := range s.Sessions {
		if s.Sessions[i].Filter == filter {
			s.Sessions[i].Connected = up
			return
		}
	}
	s.Sessions = append(s.Sessions, Session{Filter: filter, Connected: up})
}

// Boot notes that a process took over: of the sessions there were none is
// connected yet.
func (a *Aligner) Boot(s *State, host int64) {
	for i := range s.Sessions {
		s.Sessions[i].Connected = false
	}
	s.Backlog, s.Heard = host+a.cfg.Backlog, false
}

// Waiting tells that no session is connected, so that scans wait for what the
// broker keeps. Records fed without a broker know of no session: they never wait.
func (s *State) Waiting() bool {
	for i := range s.Sessions {
		if s.Sessions[i].Connected {
			return false
		}
	}
	return len(s.Sessions) > 0
}

// CatchingUp tells that scans of the past are made. Before anything has come there
// is nothing to catch up with: there is no data yet.
func (s *State) CatchingUp(host int64) bool {
	return s.Backlog != 0 && s.Heard && s.Next != 0 && host-s.Next > int64(1e9)
}

// Scan closes the oldest open interval if it can be closed at host time, fills
// out with it and reports true. Call it until it reports false. out has one entry
// per channel; Value and final qualities are left to calibration.
func (a *Aligner) Scan(s *State, host int64, out *monitor.Scan) bool {
	if s.Next == 0 {
		return false
	}
	if s.Backlog != 0 && host >= s.Backlog {
		s.Backlog = 0
		a.shrink(s)
	}
	complete, missing := a.complete(s)
	if host < s.Patient || !complete {
		now := host
		switch {
		case s.Waiting(), s.Backlog != 0 && missing && host-s.Up < settle:
			return false
		case s.Backlog != 0:
			now = a.reached(s, host)
		}
		a.skip(s, now-a.cfg.Lateness)
		if now < s.Next+a.cfg.Lateness {
			return false
		}
	}
	a.closeScan(s, out)
	return true
}

// complete tells whether every expected channel has a sample at or after Next, or
// one that is expected has not.
func (a *Aligner) complete(s *State) (complete, missing bool) {
	for i := range s.Channels {
		cs := &s.Channels[i]
		if cs.Streak < streakFull {
			continue
		}
		if cs.Newest < s.Next {
			return false, true
		}
		complete = true
	}
	return complete, false
}

// reached gives the event time up to which a backlog has come in: that of the
// source furthest behind. Sources that are silent are not waited for, and once
// one is live the others for a while only.
func (a *Aligner) reached(s *State, host int64) int64 {
	t, live := s.MaxEvent, false
	for i := range s.Sources {
		src := &s.Sources[i]
		switch {
		case host-src.Host >= settle:
		case a.behind(src):
			t = min(t, src.Event)
		default:
			live = true
		}
	}
	if live && host-s.Up >= gatherFor {
		return s.MaxEvent
	}
	return t
}

func (a *Aligner) closeScan(s *State, out *monitor.Scan) {
	n := len(a.cfg.Channels)
	row := s.Table[s.Base*n : (s.Base+1)*n]
	s.N++
	out.N, out.T = s.N, s.Next
	for i := range row {
		acc, cs := &row[i], &s.Channels[i]
		out.Samples[i] = uint16(min(acc.N, math.MaxUint16))
		if acc.N > 0 {
			v := acc.Sum / float64(acc.N)
			cs.Last, cs.Time, cs.Seen = v, acc.Newest, true
			cs.Streak = min(cs.Streak+1, streakFull)
			out.Quality[i] = monitor.QualityGood
		} else {
			cs.Streak = 0
			out.Quality[i] = monitor.QualityHeld
		}
		out.Raw[i], out.Age[i] = cs.Last, s.Next-cs.Time
		switch {
		case !cs.Seen:
			out.Raw[i], out.Age[i], out.Quality[i] = math.NaN(), -1, monitor.QualityMissing
		case out.Age[i] > a.cfg.Channels[i].Hold:
			out.Quality[i] = monitor.QualityStale
		}
		*acc = Acc{}
	}
	s.Base = (s.Base + 1) % s.Rows
	s.Next += a.cfg.Period
}

// ceil gives the least multiple of p that is not below t.
func ceil(t, p int64) int64 {
	q := t / p
	if q*p < t {
		q++
	}
	return q * p
}
