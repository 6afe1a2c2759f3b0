package check

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/monitor"
	"throatwatch/monitor/calib"
)

// calibrations judges that no sensor is past the date of its calibration at the event time
// t, unless somebody answers for its use.
func (j *judge) calibrations(t int64) {
	var expired, waived []string
	on := 0
	for i := range j.c.Channels {
		r := j.c.Channels[i].RecordAt(t)
		switch r.State(t) {
		case calib.Expired:
			expired = append(expired, fmt.Sprintf("%s, sensor %s, was due on %s", j.c.Channels[i].ID, r.Serial, r.Due))
		case calib.Waived:
			waived = append(waived, fmt.Sprintf("%s, due on %s, is answered for by %s", j.c.Channels[i].ID, r.Due, r.Waiver.Who))
			on++
		case calib.InDate:
			on++
		case calib.NotOnFile:
		}
	}
	good := fmt.Sprintf("%d have a date, none is past it", on)
	if len(waived) > 0 {
		good = strings.Join(waived, "; ")
	}
	j.either(KindCalibration, "Calibrations in date", expired, good)
}

// around judges what no channel shows: clocks, broker, disk, limits in force.
func (j *judge) around(q *Request, b *Bench) {
	a := &b.Around
	var late, dead, lost []string
	for _, s := range a.Sources {
		if s.Skewed || max(s.Skew, -s.Skew) > j.l.Skew {
			late = append(late, fmt.Sprintf("%s is %.1f s off the host's clock", s.Topic, math.Abs(float64(s.Skew)/1e9)))
		}
		if !s.Alive {
			dead = append(dead, s.Topic+" has fallen silent")
		}
	}
	for _, s := range a.Sessions {
		if !s.Connected {
			lost = append(lost, s.Filter+" is not connected")
		}
	}
	j.either(KindClock, "Clocks of the publishers", late, fmt.Sprintf("all within %s of the host's", span(j.l.Skew)))
	connected := fmt.Sprintf("%d connected", len(a.Sessions))
	switch {
	case len(a.Sessions) > 0:
	case j.g.Samples > 0:
		connected = "none: the data comes without a broker"
	default:
		lost = []string{"none is known"}
	}
	j.either(KindBroker, "Sessions with the broker", lost, connected)
	j.either(KindSources, "Publishers", dead, fmt.Sprintf("all %d send", len(a.Sources)))
	j.add(KindInputPath, "", "Path from broker to computation", !a.Deaf, "%s", pick(a.Deaf, "the probe messages do not come back", "the probe messages come back"))
	j.add(KindRecording, "", "Recording", a.Recording, "%s", pick(a.Recording, "what comes in is stored", "what comes in is not stored"))
	j.disk(q, a)
	j.configuration(a)
}

// either adds an item that passes without reasons against it.
func (j *judge) either(kind, title string, against []string, good string) {
	if len(against) > 0 {
		good = strings.Join(against, "; ")
	}
	j.add(kind, "", title, len(against) == 0, "%s", good)
}

func pick(yes bool, a, b string) string {
	if yes {
		return a
	}
	return b
}

// span writes a length of time, ns.
func span(ns int64) string {
	switch s := float64(ns) / 1e9; {
	case s >= 3600:
		return fmt.Sprintf("%.3g h", s/3600)
	case s >= 120:
		return fmt.Sprintf("%.3g min", s/60)
	default:
		return fmt.Sprintf("%.3g s", s)
	}
}

// disk judges whether the disk lasts for the planned length: at the values that came per
// second in the window, and storedPerValue bytes for each.
func (j *judge) disk(q *Request, a *Around) {
	planned := q.Planned
	if planned == 0 {
		planned = j.l.Planned
	}
	rate := 0.0
	if j.g.Scans > 1 { // of n scans n − 1 periods lie between the first and the last
		rate = float64(j.g.Samples) / float64(j.g.Scans) * float64(j.g.Scans-1) / (float64(j.g.To-j.g.From) / 1e9)
	}
	need := room * storedPerValue * rate * float64(planned) / 1e9
	const title = "Disk for the planned length"
	if a.Free == 0 {
		j.add(KindDisk, "", title, false, "it is not known how much is free")
		return
	}
	it := j.add(KindDisk, "", title, a.Free >= need, "%.1f GB free; %v take %.2f GB at %.0f values/s and %d bytes each, twice that is asked for",
		a.Free/1e9, span(planned), need/room/1e9, rate, storedPerValue)
	it.Value, it.Limit, it.Unit = monitor.ReadingOf(a.Free), monitor.ReadingOf(need), "B"
}

// configuration judges that limits and rules in force are approved and those of the files.
func (j *judge) configuration(a *Around) {
	var wrong []string
	if a.Approved == "" {
		wrong = append(wrong, "not approved")
	}
	if a.Refused != "" {
		wrong = append(wrong, "other files were refused: "+a.Refused)
	}
	what := fmt.Sprintf("limits %s, sha256 %.12s", pick(a.Version == "", "without a version", a.Version), a.Hash)
	if len(wrong) == 0 {
		what += ", approved by " + a.Approved
	}
	j.add(KindConfiguration, "", "Limits and rules in force", len(wrong) == 0, "%s", strings.Join(append([]string{what}, wrong...), ", "))
}

// ticks adds what is ticked by hand.
func (j *judge) ticks(q *Request) {
	for _, t := range j.l.AllTicks() {
		i := slices.IndexFunc(q.Ticks, func(d Ticked) bool { return d.ID == t.ID && strings.TrimSpace(d.By) != "" })
		if i < 0 {
			j.add(KindTick, t.ID, t.Title, false, "not ticked")
			continue
		}
		j.add(KindTick, t.ID, t.Title, true, "ticked by %s", q.Ticks[i].By).By = q.Ticks[i].By
	}
}
