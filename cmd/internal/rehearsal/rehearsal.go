// Package rehearsal plays a test of a simulated turbojet on the rig of a rig file:
// it yields the MQTT messages that the rig's data systems would publish.
//
// The rig file alone says what is played. A channel that a station names shows
// that station's value of an engine whose numbers agree with each other: rotor
// and fuel control make speed and temperature, the running line makes pressure,
// the nozzle of the rig file passes the flow, and bellmouth air plus fuel is that
// flow. Any other channel shows something that fits its dimension and range.
// Readings have what real ones have: calibration backwards, lag, systematic error,
// noise, ADC steps; and faults on request.
//
// It is a rehearsal of the data system, not an engine model to learn an engine
// from: the dynamics are first order and the running line is a made-up one.
//
// Nothing here reads a clock. A rig yields the same bytes for the same rig file,
// options and build.
package rehearsal

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"time"

	"throatwatch/ingest/decode"
	"throatwatch/monitor/align"
	"throatwatch/monitor/unit"
	"throatwatch/rules/pipeline"
)

// Options say what is played.
type Options struct {
	Seed     uint64
	Scenario Scenario
	Faults   []Fault
	Rate     float64 // packs per second of device time, 1 to 1000; 0 = 50
	Speed    float64 // the test passes this many times faster than on an engine, 0.1 to 100; 0 = 1
	Start    int64   // device time of the first pack, ns UTC

	Rest    time.Duration // for so long the rig is at rest before the test and after it as well, up to an hour
	Plan    []Segment     // instead of a scenario
	Day     Day
	Noise   float64  // of the readings, times what the rig file states; 0 = 1
	Error   float64  // systematic error, times that of a good instrument; 0 = 1
	Changes []Change // of what single channels measure
}

// Message is one MQTT message as the rig's data system publishes it.
type Message struct {
	At      int64 // true device time of its readings, ns UTC; a wrong device clock shows in the payload only
	Delay   int64 // ns from At to the moment it is published
	Topic   string
	Payload []byte // the receiver's to keep
}

// Status is how the test stands, for a progress line.
type Status struct {
	Segment string        // what the console is set to
	Elapsed time.Duration // of the test
	Total   time.Duration
	Speed   float64 // rpm
	NPR     float64 // p7 over back pressure
	EGT     float64 // K, indicated, before the lag of the probes
}

// Rig is a simulated rig in the middle of a test. It belongs to one goroutine.
type Rig struct {
	plant    *plant
	sensors  []sensor
	groups   []group
	plan     []Segment
	faults   []*active
	rate     float64 // packs per second of the test
	speed    float64 // seconds of the test per second of device time
	start    int64
	total    time.Duration
	pack     int           // number of the next pack
	now      time.Duration // of the newest pack, in the test
	at       int           // segment of the newest pack
	begun    time.Duration // when it began
	noise    *rand.Rand    // of the readings; untouched by faults
	link     *rand.Rand    // of delays and damage
	gaps     *rand.Rand    // of samples that are missing
	due      int64         // of the newest message
	outbox   []held
	changes  []change
	sent     []bool
	late     []bool
	readings []decode.Reading
}

// group is the channels that go out in one message.
type group struct {
	topic    string
	format   decode.Format
	channels []int
	names    []string
}

// held is a message that goes out later than it should.
type held struct {
	release time.Duration
	Message
}

// most bounds the outbox. When it is full the oldest message is lost, as in a
// publisher that stores and forwards.
const most = 20000

// New makes a rig at rest. It returns an error where the rig file does not give
// enough to play, and one that wraps ErrFault for a fault that fits no channel.
func New(cfg pipeline.Config, o Options) (*Rig, error) {
	if o.Rate == 0 {
		o.Rate = 50
	}
	if !(o.Rate >= 1 && o.Rate <= 1000) {
		return nil, fmt.Errorf("rehearsal: rate %g/s: give 1 to 1000 packs per second", o.Rate)
	}
	if o.Speed == 0 {
		o.Speed = 1
	}
	if !(o.Speed >= 0.1 && o.Speed <= 100) {
		return nil, fmt.Errorf("rehearsal: speed %g: give 0.1 to 100", o.Speed)
	}
	c := &cfg.Compute
	if len(c.Channels) == 0 || len(c.Channels) != len(cfg.Align.Channels) {
		return nil, errors.New("rehearsal: the rig file has no channels")
	}
	r := &Rig{
		rate: o.Rate / o.Speed, speed: o.Speed, start: o.Start, due: o.Start,
		noise: rand.New(rand.NewPCG(o.Seed, 1)),
		link:  rand.New(rand.NewPCG(o.Seed, 2)),
		gaps:  rand.New(rand.NewPCG(o.Seed, 3)),
		sent:  make([]bool, len(c.Channels)),
		late:  make([]bool, len(c.Channels)),
	}
	var err error
	if err = o.Day.check(); err != nil {
		return nil, err
	}
	if r.plant, err = newPlant(c, o.Day, r.noise); err != nil {
		return nil, err
	}
	off := min(300, float64(c.Phase.OffAfter+cfg.Run.EndAfter)/1e9)
	if r.plan = o.Plan; len(r.plan) == 0 {
		if r.plan, err = plan(o.Scenario, &r.plant.line, off); err != nil {
			return nil, err
		}
	}
	if o.Rest < 0 || o.Rest > time.Hour {
		return nil, fmt.Errorf("rehearsal: rest of %v: give up to an hour", o.Rest)
	}
	if o.Rest > 0 {
		rest := Segment{Name: "at rest", Seconds: o.Rest.Seconds()}
		r.plan = append(append([]Segment{rest}, r.plan...), rest)
	}
	r.total = total(r.plan)
	hold := make([]int64, len(c.Channels))
	for i := range hold {
		hold[i] = cfg.Align.Channels[i].Hold
	}
	if r.sensors, err = newSensors(c, o.Rate, hold, r.plant, r.noise); err != nil {
		return nil, err
	}
	for i := range r.sensors {
		r.sensors[i].sigma *= orOne(o.Noise)
		r.sensors[i].offset *= orOne(o.Error)
	}
	r.groups = newGroups(cfg.Rig.ID, &cfg.Align)
	if r.changes, err = fitChanges(c, o.Changes); err != nil {
		return nil, err
	}
	for _, f := range o.Faults {
		a, err := f.fit(c)
		if err != nil {
			return nil, err
		}
		if f.Kind == WrongUnit && r.formatOf(a.channel) == decode.Lines {
			return nil, fmt.Errorf("rehearsal: fault %s: %q comes as line protocol, which names no unit: %w", f.Kind, c.Channels[a.channel].ID, ErrFault)
		}
		if f.Kind == BarometerUnit && r.sensors[a.channel].sentIn().Dimension != unit.Pressure {
			return nil, fmt.Errorf("rehearsal: fault %s: %q is not sent as a pressure: %w", f.Kind, c.Channels[a.channel].ID, ErrFault)
		}
		r.faults = append(r.faults, a)
	}
	return r, nil
}

// newGroups sorts the channels by the topic they go out on: their own one, else the
// first input without a wildcard, else rigs/<rig>/senml.
func newGroups(rig string, c *align.Config) []group {
	common, format := "rigs/"+rig+"/senml", decode.SenMLJSON
	for _, in := range c.Inputs {
		if in.Format != decode.Value && !strings.ContainsAny(in.Filter, "+#") {
			common, format = in.Filter, in.Format
			break
		}
	}
	var groups []group
	for i, ch := range c.Channels {
		topic, f := common, format
		if ch.Topic != "" {
			topic, f = ch.Topic, decode.Value
			for _, in := range c.Inputs {
				if align.Match(in.Filter, topic) {
					f = in.Format
					break
				}
			}
		}
		name := ch.Name
		if name == "" {
			name = ch.ID
		}
		g := slices.IndexFunc(groups, func(g group) bool { return g.topic == topic && f != decode.Value })
		if g < 0 {
			g = len(groups)
			groups = append(groups, group{topic: topic, format: f})
		}
		groups[g].channels = append(groups[g].channels, i)
		groups[g].names = append(groups[g].names, name)
	}
	return groups
}

func (r *Rig) formatOf(channel int) decode.Format {
	for _, g := range r.groups {
		if slices.Contains(g.channels, channel) {
			return g.format
		}
	}
	return decode.FormatInvalid
}

// Length gives how long the test takes in device time.
func (r *Rig) Length() time.Duration { return time.Duration(float64(r.total) / r.speed) }

// Now gives the device time of the newest pack, ns UTC.
func (r *Rig) Now() int64 { return r.start + int64(float64(r.now)/r.speed) }

// Status tells how the test stands.
func (r *Rig) Status() Status {
	p := r.plant
	return Status{Segment: r.plan[r.at].Name, Elapsed: r.now, Total: r.total, Speed: p.n * p.max, NPR: p.npr, EGT: p.egt}
}

// Next takes the test to the next instant and appends the messages that are
// published then to dst; there may be none. Their At + Delay never falls from one
// message to the next. After the last instant more is false.
func (r *Rig) Next(dst []Message) (msgs []Message, more bool) {
	t := time.Duration(math.Round(float64(r.pack) * 1e9 / r.rate))
	if t >= r.total {
		// What is still held back goes out with the end.
		dst = r.release(dst, math.MaxInt64)
		return dst, false
	}
	r.advance(t)
	dst = r.release(dst, t)
	r.read()
	for i := range r.groups {
		dst = r.publish(dst, &r.groups[i])
	}
	r.pack++
	return dst, true
}

// advance takes plant and sensors to the time t.
func (r *Rig) advance(t time.Duration) {
	dt := (t - r.now).Seconds()
	r.now = t
	for r.at < len(r.plan)-1 && t >= r.begun+seconds(r.plan[r.at].Seconds) {
		r.begun += seconds(r.plan[r.at].Seconds)
		r.at++
	}
	s := &r.plan[r.at]
	from := 0.0
	if r.at > 0 {
		from = r.plan[r.at-1].Speed
	}
	if dt > 0 {
		if err := r.plant.advance(dt, s, (t-r.begun).Seconds()/s.Seconds, from); err != nil {
			// New has gone through the whole of the running line.
			panic(err)
		}
	}
	for i := range r.sensors {
		s := &r.sensors[i]
		s.follow(r.changed(i, s.input(r.plant, r.heat(i))), dt, r.lags(i))
	}
}

// read fills in the readings of all channels. Every channel takes its noise in every
// pack, so that no fault changes the readings of another channel.
func (r *Rig) read() {
	r.readings = r.readings[:0]
	for i := range r.sensors {
		s := &r.sensors[i]
		raw := s.read(r.noise.NormFloat64()*r.scatter(i), r.shift(i))
		raw, r.sent[i] = r.replace(i, raw)
		r.sent[i], r.late[i] = r.sent[i] && r.pack%s.every == 0, false
		r.readings = append(r.readings, decode.Reading{Unit: s.unitName, Value: raw})
	}
}

// publish appends the message of a group with what faults make of it.
func (r *Rig) publish(dst []Message, g *group) []Message {
	at := r.Now()
	own := make([]decode.Reading, 0, len(g.channels))
	for k, i := range g.channels {
		if r.sent[i] {
			reading := r.readings[i]
			reading.Name = g.names[k]
			for _, f := range r.faults {
				switch {
				case f.channel != i || !f.at(r.now):
				case f.Kind == NotANumber:
					reading.Value = math.NaN()
				case f.Kind == WrongUnit:
					reading.Unit = foreign(r.sensors[i].spec.Raw)
				}
			}
			own = append(own, reading)
		}
	}
	if len(own) == 0 {
		return dst
	}

	clock := at
	delay := 1e6 + r.link.Int64N(4e6)
	silent, malformed, truncated, twice, huge := false, false, false, false, false
	var hold time.Duration
	for _, f := range r.faults {
		if faults[f.Kind].channel || !f.at(r.now) || (f.channel >= 0 && !slices.Contains(g.channels, f.channel)) {
			continue
		}
		f.count++
		//exhaustive:ignore
		switch f.Kind {
		case PublisherSilent:
			silent = true
		case ClockSkew:
			clock += int64(30 * time.Second)
		case ClockPast:
			clock -= int64(10 * time.Minute)
		case Duplicate:
			twice = true
		case Reorder:
			if f.count%3 == 0 {
				hold = max(hold, time.Duration(5e7+r.link.Int64N(35e7)))
			}
		case Burst:
			hold = max(hold, f.At+f.For-r.now)
		case Malformed:
			malformed = malformed || f.count%2 == 0
		case Truncated:
			truncated = truncated || f.count%2 == 0
		case Huge:
			huge = huge || f.count%25 == 1
		}
	}
	for _, i := range g.channels { // for Truth
		r.sent[i] = r.sent[i] && !silent && !malformed && !truncated
		r.late[i] = hold > 0
	}
	if silent {
		return dst
	}
	payload := g.encode(clock, own)
	if twice {
		r.keep(r.now+300*time.Millisecond, Message{At: at, Topic: g.topic, Payload: bytes.Clone(payload)})
	}
	if huge {
		dst = r.emit(dst, Message{At: at, Delay: delay, Topic: g.topic, Payload: append(bytes.Clone(payload), bytes.Repeat([]byte(" "), 400_000)...)})
	}
	if malformed {
		payload = r.damage(payload, g.format)
	}
	if truncated {
		payload = payload[:1+r.link.IntN(len(payload)-1)]
	}
	m := Message{At: at, Delay: delay, Topic: g.topic, Payload: payload}
	if hold > 0 {
		r.keep(r.now+hold, m)
		return dst
	}
	return r.emit(dst, m)
}

// keep puts a message into the outbox.
func (r *Rig) keep(release time.Duration, m Message) {
	if len(r.outbox) == most {
		r.outbox = slices.Delete(r.outbox, 0, 1)
	}
	r.outbox = append(r.outbox, held{release, m})
}

// release appends the messages of the outbox that go out by the time t, in the order
// in which they went in.
func (r *Rig) release(dst []Message, t time.Duration) []Message {
	rest := r.outbox[:0]
	for _, h := range r.outbox {
		if h.release > t {
			rest = append(rest, h)
			continue
		}
		h.Delay = r.Now() - h.At
		dst = r.emit(dst, h.Message)
	}
	clear(r.outbox[len(rest):])
	r.outbox = rest
	return dst
}

// emit appends a message, not before the one before it.
func (r *Rig) emit(dst []Message, m Message) []Message {
	r.due = max(r.due, m.At+m.Delay)
	m.Delay = r.due - m.At
	return append(dst, m)
}

// damage changes a payload so that it cannot be parsed.
func (r *Rig) damage(p []byte, f decode.Format) []byte {
	if f == decode.SenMLJSON || f == decode.Value {
		i := r.link.IntN(len(p))
		return slices.Insert(p, i, 0x01) // JSON allows no control character anywhere [RFC 8259 7]
	}
	p = bytes.ReplaceAll(p, []byte("="), []byte{0x01})
	p[0] = 0xff // CBOR: the end of something that has not begun [RFC 8949 3.2.1]
	return p
}

// encode gives the payload of a group's readings at device time t.
func (g *group) encode(t int64, readings []decode.Reading) []byte {
	dst := make([]byte, 0, 64*(len(readings)+1))
	switch g.format {
	case decode.SenMLCBOR:
		return decode.AppendSenMLCBOR(dst, "", t, readings)
	case decode.Lines:
		for _, v := range readings {
			dst = append(dst, strings.NewReplacer(",", `\,`, " ", `\ `).Replace(v.Name)...)
			dst = strconv.AppendFloat(append(dst, " value="...), v.Value, 'g', -1, 64)
			dst = append(strconv.AppendInt(append(dst, ' '), t, 10), '\n')
		}
		return dst
	case decode.Value:
		v := readings[0]
		if math.IsNaN(v.Value) {
			return append(dst, "NaN"...)
		}
		return fmt.Appendf(dst, `{"t":%d.%06d,"v":%s,"u":%q}`, t/1e9, t%1e9/1e3, strconv.FormatFloat(v.Value, 'g', -1, 64), v.Unit)
	case decode.SenMLJSON, decode.FormatInvalid:
	}
	dst = decode.AppendSenMLJSON(dst, "", t, readings)
	for _, v := range readings {
		if math.IsNaN(v.Value) { // left out by the encoder: JSON has no NaN, but it has numbers that are none
			dst = fmt.Appendf(dst[:len(dst)-1], `,{"n":%q,"v":1e999}]`, v.Name)
		}
	}
	return dst
}

// Run plays the rest of the test: it calls pace before each message with the time
// at which it is due, ns UTC, at least once per instant, and publish with the
// message. It returns the first error of either, or nil at the end.
func Run(ctx context.Context, r *Rig, pace func(ctx context.Context, due int64) error, publish func(context.Context, Message) error) error {
	var msgs []Message
	for more := true; more; {
		msgs, more = r.Next(msgs[:0])
		for _, m := range msgs {
			if err := pace(ctx, m.At+m.Delay); err != nil {
				return err
			}
			if err := publish(ctx, m); err != nil {
				return fmt.Errorf("rehearsal: publish on %q: %w", m.Topic, err)
			}
		}
		if len(msgs) == 0 {
			if err := pace(ctx, max(r.Now(), r.due)); err != nil {
				return err
			}
		}
	}
	return nil
}
