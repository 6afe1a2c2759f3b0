package rake

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"throatwatch/monitor"
)

const (
	// smooth is the time constant of the filter on a probe's departure, ns.
	smooth = int64(1e9)
	// longest is the most that one scan counts in learning, ns.
	longest = int64(1e9)
	// quiet is the part of the limit within which every probe has to be for the
	// patterns to be learned, and a probe to be taken back.
	quiet = 0.5
	// voters is the least number of probes of which one can be told apart.
	voters = 3
)

// Exclusion says why a probe is out.
type Exclusion uint8

// The exclusions.
const (
	In          Exclusion = iota // it is not
	ByProof                      // proof of failure, held
	ByDeparture                  // beyond the limit from its own pattern, held
)

// String gives the exclusion as code.
func (e Exclusion) String() string {
	names := [...]string{"in", "proof", "departure"}
	if int(e) < len(names) {
		return names[e]
	}
	return "invalid"
}

// MarshalText writes the code.
func (e Exclusion) MarshalText() ([]byte, error) { return []byte(e.String()), nil }

// Watch is how a group of probes is watched. Times in ns, values in the unit of
// the probes.
type Watch struct {
	Probes  int
	Weights []float64 // of each probe in the mean, > 0; nil counts all the same
	Least   int       // fewest probes for a mean

	// Departure from a probe's own pattern beyond which it is excluded once that
	// was so for DepartureHold; 0 = never. Below four times the scatter of a probe
	// it excludes healthy ones.
	Departure     float64
	DepartureHold int64 // 3 s
	// Agree is the same for learning where no departure excludes: see agrees; 0 = learn all.
	Agree     float64
	ProofHold int64 // 1 s
	KeepHot   bool  // an EGT harness: reading hot excludes no probe
	Return    int64 // ns without fault after which a probe is taken back; 0 = by Readmit only

	Learn  int64 // ns of steady time after which a pattern is known
	Memory int64 // ns of steady time over which a pattern adapts, ≥ Learn. A drift slower than Departure/Memory is learned and not found

	Sampling float64 // standard uncertainty that the mean has from the places of the probes; 0 = from their pattern
}

// Check tells what is wrong with a Watch.
func (w *Watch) Check() error {
	var faults []error
	if w.Probes < 1 || w.Probes > MaxProbes {
		faults = append(faults, fmt.Errorf("rake: %d probes, want 1 to %d", w.Probes, MaxProbes))
	}
	if w.Weights != nil && len(w.Weights) != w.Probes {
		faults = append(faults, fmt.Errorf("rake: %d weights for %d probes", len(w.Weights), w.Probes))
	}
	for i, v := range w.Weights {
		if !(v > 0) || math.IsInf(v, 0) {
			faults = append(faults, fmt.Errorf("rake: weight %d is %v, want a positive number", i+1, v))
		}
	}
	if w.Memory < w.Learn {
		faults = append(faults, fmt.Errorf("rake: memory of %v ns is shorter than the %v ns to learn", w.Memory, w.Learn))
	}
	if !(w.Departure >= 0) || !(w.Agree >= 0) || !(w.Sampling >= 0) {
		faults = append(faults, fmt.Errorf("rake: departure %v, agreement %v, sampling %v: want none or a positive number", w.Departure, w.Agree, w.Sampling))
	}
	return errors.Join(faults...)
}

// Probe is what is remembered of one.
type Probe struct {
	Offset  float64 // learned: reading − mean of the group
	Learned int64   // ns of steady time in it
	Depart  float64 // reading − level of the group − Offset, filtered
	Judged  bool    // Depart means something
	Out     Exclusion
	Since   int64 // event time of the exclusion

	Proof    bool // proof of failure, not yet without it for ProofHold
	ProofAt  int64
	Last     monitor.Quality // of the last proof
	CleanAt  int64           // event time since when a scan shows no proof
	Clean    bool
	Beyond   bool // Depart beyond the limit
	BeyondAt int64
	Fit      bool // while out: nothing speaks against it
	FitAt    int64
}

// State is what a Watch remembers. It is plain data; the zero value has seen nothing.
type State struct {
	Probes []Probe
	T      int64
	Seen   bool
	Proven uint64 // probes of which Sense proves that they are shorted or do not respond

	Disagree int64 // ns of steady time in which the patterns that are learned were held against
}

// Result is what a scan says. Sets have bit i for probe i.
type Result struct {
	Mean     float64 // of the group, with the places of absent probes filled by their patterns; NaN with fewer than Least
	Used     int     // probes that are read
	Sampling float64 // standard uncertainty of Mean by the places of the probes, NaN if not known
	Known    bool    // the pattern is learned
	Filled   uint64  // absent probes whose place is filled by their pattern
	Out      uint64  // excluded
	Hot      uint64  // beyond the limit above the pattern for DepartureHold, and kept
	Changed  uint64  // excluded or taken back in this scan
}

// Step enters a scan at event time t: values with their qualities, one per probe. A
// value whose quality is not usable is not looked at. learn is whether the group is
// in a steady phase; the patterns are learned only then, and only while no probe
// departs by half the limit.
//
// With offsets o_i the mean is L = Σ w_i (v_i − o_i)/Σ w_i over the probes that are read.
// As long as all are, the offsets add to nothing and L is the plain weighted mean; if
// one is absent, L is what the mean would be with it at its usual place. A probe that
// comes in later than the others learns its offset before it counts, and the mean
// then moves to its plain value over Memory.
//
// The departure of a probe is against the median of all v_j − o_j, so that one bad
// probe does not make the others depart. It excludes none when there are fewer than
// three, nor when half of them depart, nor if fewer than Least would remain: then it
// cannot be told which is right.
func (w *Watch) Step(s *State, t int64, values []float64, quality []monitor.Quality, learn bool) Result {
	if len(s.Probes) != w.Probes {
		*s = State{Probes: make([]Probe, w.Probes)}
	}
	dt := int64(0)
	if s.Seen {
		dt = min(max(t-s.T, 0), longest)
	}
	s.T, s.Seen = max(t, s.T), true

	known := s.known(w)
	r := Result{Known: known}
	for i := range s.Probes {
		proven := s.Proven&(1<<i) != 0
		if s.Probes[i].prove(t, quality[i], proven, w.ProofHold) {
			r.Changed |= 1 << i
		}
	}
	if r.Changed != 0 && !known {
		s.restart(w) // what has failed may have been learned for a while, and spoilt the others
	}
	r.Changed |= w.depart(s, t, dt, values, quality, known)

	// The mean, over probes whose offset is known if there are any. Until then offsets are
	// half learned: it is the plain one.
	var sum, all float64
	for _, need := range [...]bool{known, false} {
		for i := range s.Probes {
			p := &s.Probes[i]
			if p.Out == In && quality[i].Usable() && (!need || p.Learned >= w.Learn) {
				v := values[i]
				if known {
					v -= p.Offset
				}
				sum += w.weight(i) * v
				all += w.weight(i)
			}
		}
		if all > 0 {
			break
		}
	}
	for i := range s.Probes {
		p := &s.Probes[i]
		switch {
		case p.Out == In && quality[i].Usable():
			r.Used++
		case p.Learned > 0 && p.Learned >= w.Learn:
			r.Filled |= 1 << i
		}
		if p.Out != In {
			r.Out |= 1 << i
		} else if w.KeepHot && p.Beyond && p.Depart > 0 && t-p.BeyondAt >= w.DepartureHold {
			r.Hot |= 1 << i
		}
	}
	r.Mean = math.NaN()
	if all > 0 {
		if mean := sum / all; r.Used >= w.Least {
			r.Mean = mean
		}
		if learn && dt > 0 && w.settled(s) && w.agrees(s, dt, sum/all, values, quality) {
			w.learn(s, dt, sum/all, values, quality)
		}
	}
	r.Sampling = w.sampling(s, values, quality, known)
	return r
}

// known tells whether there is a probe whose pattern is known.
func (s *State) known(w *Watch) bool {
	for i := range s.Probes {
		if s.Probes[i].Learned > 0 && s.Probes[i].Learned >= w.Learn {
			return true
		}
	}
	return false
}

// prove judges what the quality of a reading proves. Proof goes on through scans
// without it that last less than hold, as a loose contact makes them. What is proven
// otherwise has been held already.
func (p *Probe) prove(t int64, q monitor.Quality, proven bool, hold int64) (changed bool) {
	if proven {
		p.Proof, p.Clean = true, false
		if p.Out == In {
			p.Out, p.Since, p.Fit = ByProof, t, false
			return true
		}
		return false
	}
	switch q {
	case monitor.QualityOutOfRange, monitor.QualityInvalidCode, monitor.QualityRate, monitor.QualityStuck:
		if !p.Proof {
			p.Proof, p.ProofAt = true, t
		}
		p.Last = q
		p.Clean = false
		if p.Out == In && t-p.ProofAt >= hold {
			p.Out, p.Since, p.Fit = ByProof, t, false
			return true
		}
	case monitor.QualityGood, monitor.QualityHeld:
		if !p.Clean {
			p.Clean, p.CleanAt = true, t
		}
		if t-p.CleanAt >= hold {
			p.Proof = false
		}
	case monitor.QualityMissing, monitor.QualityStale, monitor.QualityNoReference, monitor.QualityExcluded, monitor.NumQualities:
		// Nothing is known of the probe.
	}
	return false
}

// depart updates the departures and excludes and takes back by them.
func (w *Watch) depart(s *State, t, dt int64, values []float64, quality []monitor.Quality, known bool) (changed uint64) {
	var level [MaxProbes]float64
	n := 0
	for i := range s.Probes {
		p := &s.Probes[i]
		if p.Out == In && quality[i].Usable() && (!known || p.Learned >= w.Learn) {
			level[n] = values[i] - p.Offset
			n++
		}
	}
	if n == 0 {
		return 0
	}
	middle := median(level[:n])
	follow := -math.Expm1(-float64(dt) / float64(smooth))
	beyond := 0
	for i := range s.Probes {
		p := &s.Probes[i]
		if !quality[i].Usable() || p.Learned == 0 || p.Learned < w.Learn {
			p.Judged = p.Judged && p.Learned > 0
			continue
		}
		d := values[i] - p.Offset - middle
		if !p.Judged {
			p.Depart, p.Judged = d, true
		} else {
			p.Depart += follow * (d - p.Depart)
		}
		// What has returned is not held, though the filter still shows it.
		is := w.Departure > 0 && math.Abs(p.Depart) > w.Departure && math.Abs(d) > quiet*w.Departure
		if is && !p.Beyond {
			p.BeyondAt = t
		}
		p.Beyond = is
		if p.Beyond && p.Out == In {
			beyond++
		}
	}
	for i := range s.Probes {
		p := &s.Probes[i]
		switch {
		case p.Out != In:
			if p.back(t, quality[i], w) {
				changed |= 1 << i
			}
		case !p.Beyond || t-p.BeyondAt < w.DepartureHold || !quality[i].Usable():
		case w.KeepHot && p.Depart > 0:
		case n >= voters && 2*beyond < n && n-1 >= w.Least:
			p.Out, p.Since, p.Fit = ByDeparture, t, false
			changed |= 1 << i
			n, beyond = n-1, beyond-1
		}
	}
	return changed
}

// back takes a probe in again once nothing has spoken against it for long enough.
func (p *Probe) back(t int64, q monitor.Quality, w *Watch) bool {
	fit := q.Usable() && !p.Proof && (w.Departure == 0 || !p.Judged || math.Abs(p.Depart) <= quiet*w.Departure)
	if fit && !p.Fit {
		p.FitAt = t
	}
	p.Fit = fit
	if !fit || w.Return <= 0 || t-p.FitAt < w.Return {
		return false
	}
	p.Out, p.Since = In, t
	return true
}

// Reasons for which Readmit takes no probe back.
var (
	ErrNotOut = errors.New("it is not excluded")
	ErrProven = errors.New("its failure is still proven")
)

// Readmit takes an excluded probe in again, as a person asks who knows it to be sound.
// The pattern of one that departed from it begins anew: it counts again once that is
// learned. Another one counts at once. The error is ErrNotOut, or ErrProven with the
// proof that is not older than ProofHold.
func (s *State) Readmit(probe int) error {
	p := &s.Probes[probe]
	switch {
	case p.Out == In:
		return ErrNotOut
	case p.Proof && s.Proven&(1<<probe) != 0:
		return fmt.Errorf("%w: against its mates it is shorted or does not respond", ErrProven)
	case p.Proof:
		return fmt.Errorf("%w: %s", ErrProven, strings.ReplaceAll(p.Last.String(), "_", " "))
	case p.Out == ByDeparture:
		p.Offset, p.Learned = 0, 0
	}
	p.Out, p.Since, p.Beyond, p.Judged = In, s.T, false, false
	return nil
}

// Relearn forgets the patterns, as after work on the rake. Exclusions stay.
func (s *State) Relearn() {
	for i := range s.Probes {
		p := &s.Probes[i]
		p.Offset, p.Learned, p.Judged, p.Beyond = 0, 0, false, false
	}
}

// settled tells whether no probe that is read departs by what may be a fault.
func (w *Watch) settled(s *State) bool {
	for i := range s.Probes {
		p := &s.Probes[i]
		if w.Departure > 0 && p.Out == In && p.Judged && math.Abs(p.Depart) > quiet*w.Departure {
			return false
		}
	}
	return true
}

// agrees tells whether the probes read about what they did while their patterns were
// learned so far: what a probe reads that goes wrong meanwhile would be its pattern, and
// it would depart once it is right again. If they do not agree for as long as learning
// takes, it was wrong before, and learning begins anew.
func (w *Watch) agrees(s *State, dt int64, mean float64, values []float64, quality []monitor.Quality) bool {
	limit := w.Departure
	if limit == 0 {
		limit = w.Agree
	}
	agree := true
	for i := range s.Probes {
		p := &s.Probes[i]
		if limit > 0 && p.young(w) && p.Learned >= longest && p.Out == In && quality[i].Usable() {
			agree = agree && math.Abs(values[i]-mean-p.Offset) <= quiet*limit
		}
	}
	if agree {
		s.Disagree = 0
		return true
	}
	if s.Disagree += dt; s.Disagree < w.Learn {
		return false
	}
	s.restart(w)
	return true
}

// young tells whether something is learned of a pattern that is not known yet.
func (p *Probe) young(w *Watch) bool { return p.Learned > 0 && p.Learned < w.Learn }

// restart forgets what is half learned.
func (s *State) restart(w *Watch) {
	s.Disagree = 0
	for i := range s.Probes {
		if p := &s.Probes[i]; p.young(w) {
			p.Learned, p.Offset = 0, 0
		}
	}
}

// learn moves the offsets toward what this scan shows, and lets those that are
// known add to nothing.
func (w *Watch) learn(s *State, dt int64, mean float64, values []float64, quality []monitor.Quality) {
	var sum, all float64
	for i := range s.Probes {
		p := &s.Probes[i]
		if p.Out == In && quality[i].Usable() {
			p.Learned += dt
			p.Offset += float64(dt) / float64(max(min(p.Learned, w.Memory), dt)) * (values[i] - mean - p.Offset)
		}
		if p.Learned > 0 && p.Learned >= w.Learn {
			sum += w.weight(i) * p.Offset
			all += w.weight(i)
		}
	}
	if all == 0 {
		return
	}
	shift := sum / all * min(float64(dt)/float64(max(w.Memory, 1)), 1)
	for i := range s.Probes {
		if p := &s.Probes[i]; p.Learned > 0 && p.Learned >= w.Learn {
			p.Offset -= shift
		}
	}
}

// sampling gives s √(Σ w²)/Σ w, for equal weights s/√n: s the standard deviation of
// the pattern, of this scan while none is known. The places are taken as a random
// sample of the profile, which makes it a line of its own in a budget, with n − 1
// degrees of freedom, and systematic: it is the same in every scan.
func (w *Watch) sampling(s *State, values []float64, quality []monitor.Quality, known bool) float64 {
	if w.Sampling > 0 {
		return w.Sampling
	}
	var n, mean, square, weights, weights2 float64
	for i := range s.Probes {
		p := &s.Probes[i]
		v := p.Offset
		if known && p.Learned < w.Learn {
			continue
		}
		if !known {
			if p.Out != In || !quality[i].Usable() {
				continue
			}
			v = values[i]
		}
		n++
		d := v - mean
		mean += d / n
		square += d * (v - mean)
		weights += w.weight(i)
		weights2 += w.weight(i) * w.weight(i)
	}
	if n < 2 {
		return math.NaN()
	}
	return math.Sqrt(square/(n-1)*weights2) / weights
}

func (w *Watch) weight(i int) float64 {
	if w.Weights == nil {
		return 1
	}
	return w.Weights[i]
}

// median gives the middle value, of an even number the mean of the two. It sorts x.
func median(x []float64) float64 {
	slices.Sort(x)
	h := len(x) / 2
	if len(x)%2 == 1 {
		return x[h]
	}
	return (x[h-1] + x[h]) / 2
}
