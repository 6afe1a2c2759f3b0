package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest/mqtt"
	"throatwatch/rules/pipeline"
)

const (
	// rehearseBroker is where watch listens by default.
	rehearseBroker = "mqtt://127.0.0.1:1883"
	// reachBroker is how long rehearse tries to reach the broker before it gives up.
	reachBroker = 15 * time.Second
	// drainBroker is how long it waits for the last acknowledgements.
	drainBroker = 10 * time.Second
)

// rehearseCommand lets a simulated rig publish a whole test over MQTT, or plays it
// into run files. It gives 0 at the end of the test, of --for or of ctx, 1 when the
// rig file, the broker or the data folder does not allow it, 2 when called wrongly.
func rehearseCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := newFlags("rehearse RIG.yaml", "A simulated engine on the rig of the rig file publishes a whole test.", stderr)
	var (
		play   = newRehearseFlags(flags)
		site   brokerOptions
		length = flags.Duration("for", 0, "stop after this time (default: at the end of the test)")
		into   = flags.String("into", "", "play into the run files of this data folder instead, without waiting")
		start  = flags.String("start", "", "with --into: device time of the first reading, as 2026-03-02T09:00:00Z (default: so that the test ends now)")
	)
	site.flags(flags, rehearseBroker, "broker to publish to, mqtt://host:port or mqtts://host:port")
	usage := flags.Usage
	flags.Usage = func() {
		usage()
		_, _ = fmt.Fprintf(stderr, "\n%s", rehearseFaults())
	}
	rig, code := parseRig(flags, args, stderr)
	if code >= 0 {
		return code
	}
	tell := func(err error) {
		_, _ = fmt.Fprintln(stderr, "throatwatch rehearse:", err) // there is nowhere left to tell a fault
	}
	options, err := play.options()
	begin := time.Time{}
	if *start != "" {
		begin, err = time.Parse(time.RFC3339Nano, *start)
	}
	switch {
	case err != nil:
	case *length < 0:
		err = fmt.Errorf("--for %v: give a time above 0", *length)
	case *into != "" && (*length != 0 || flags.Changed("broker")):
		err = errors.New("--into takes no --for and no --broker: it does not wait; --quick is the short test")
	case *into == "" && *start != "":
		err = errors.New("--start is for --into: device time is this machine's on a broker")
	}
	if err == nil {
		err = site.check()
	}
	if err != nil {
		tell(err)
		return 2
	}
	bundle, cfg, faults := config.Load(rig)
	if err := watch.Faults(faults); err != nil {
		tell(fmt.Errorf("the configuration has faults:\n%w", err))
		return 1
	}
	if *into != "" {
		if options.Start, err = rehearseStart(cfg, options, begin); err == nil {
			err = rehearseInto(ctx, bundle, cfg, options, *into, stdout, newLog(stderr, false))
		}
	} else {
		var broker mqtt.PublisherConfig
		if broker, err = site.publisher(); err == nil {
			err = rehearseOver(ctx, cfg, options, broker, *length, stdout, stderr)
		}
	}
	if err != nil {
		tell(err)
		return 1
	}
	return 0
}

// rehearseStart gives the device time of the first reading, ns UTC: begin, or where
// that is zero, so that the test ends now.
func rehearseStart(cfg pipeline.Config, o rehearsal.Options, begin time.Time) (int64, error) {
	if !begin.IsZero() {
		return begin.UnixNano(), nil
	}
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		return 0, err
	}
	return time.Now().Add(-rig.Length()).UnixNano(), nil
}

// rehearseFlags are the flags that say what is played.
type rehearseFlags struct {
	seed   *uint64
	quick  *bool
	points *bool
	rate   *float64
	speed  *float64
	rest   *time.Duration
	faults *[]string
}

func newRehearseFlags(flags *pflag.FlagSet) rehearseFlags {
	return rehearseFlags{
		seed:   flags.Uint64("seed", 1, "number that all chance comes from; the same gives the same readings"),
		quick:  flags.Bool("quick", false, "the events of a test within a minute"),
		points: flags.Bool("points", false, "five steady points instead, those of testdata/cards/example.yaml"),
		rate:   flags.Float64("rate", 50, "packs of readings per second"),
		speed:  flags.Float64("speed", 1, "let the test pass this many times faster; allowances and delays stay in real time"),
		rest:   flags.Duration("rest", 0, "be at rest for so long before the test and after it as well: for checks of the data system; times of faults count from its begin"),
		faults: flags.StringArray("fault", nil, "a fault, name@time[+duration][:channel]; may be given more than once"),
	}
}

// options gives the options without the start; its error names every bad fault.
func (f rehearseFlags) options() (rehearsal.Options, error) {
	o := rehearsal.Options{Seed: *f.seed, Rate: *f.rate, Speed: *f.speed, Rest: *f.rest}
	var bad []error
	switch {
	case *f.quick && *f.points:
		bad = append(bad, errors.New("--quick and --points are two tests: give one"))
	case *f.quick:
		o.Scenario = rehearsal.Quick
	case *f.points:
		o.Scenario = rehearsal.Points
	}
	for _, s := range *f.faults {
		fault, err := rehearsal.ParseFault(s)
		if err != nil {
			bad = append(bad, err)
			continue
		}
		o.Faults = append(o.Faults, fault)
	}
	return o, errors.Join(bad...)
}

// rehearseFaults lists the faults for the help text.
func rehearseFaults() string {
	var b strings.Builder
	b.WriteString("Faults, as in --fault probe-open@25s:egt_3 or --fault publisher-silent@40s+10s:\n")
	for _, k := range rehearsal.FaultKinds() {
		fmt.Fprintf(&b, "  %-20s %s\n", k, k.Text())
	}
	return b.String()
}

// rehearsable tells what cannot be played on a rig.
func rehearsable(cfg pipeline.Config, f rehearseFlags) error {
	o, err := f.options()
	if err == nil {
		_, err = rehearsal.New(cfg, o)
	}
	return err
}

// rehearseOver publishes the test in real time, to its end or for length; device
// time is this machine's. The end of ctx is no error.
func rehearseOver(ctx context.Context, cfg pipeline.Config, o rehearsal.Options, broker mqtt.PublisherConfig, length time.Duration, stdout, stderr io.Writer) error {
	// What cannot be played is found before anyone waits for a broker.
	if _, err := rehearsal.New(cfg, o); err != nil {
		return err
	}
	publisher, err := mqtt.NewPublisher(broker)
	if err != nil {
		return err
	}
	running, stop := context.WithCancel(context.WithoutCancel(ctx)) // the last messages are acknowledged after ctx has ended
	ended := make(chan struct{})
	go func() { // stopped by stop
		defer close(ended)
		_ = publisher.Run(running) // the error is that of running
	}()
	defer func() { stop(); <-ended }()

	select {
	case <-publisher.Ready():
	case <-ctx.Done():
		return nil
	case <-time.After(reachBroker):
		return fmt.Errorf("broker %s is not reached: %s; start `throatwatch watch` first, or give --broker", broker.URL, publisher.Stats().LastFailure)
	}

	if length > 0 {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, length)
		defer cancel()
	}
	o.Start = time.Now().UnixNano()
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		return err
	}
	_, _ = fmt.Fprintf(stdout, "rehearsing on %s: %s test of %v, seed %d\n", cfg.Rig.ID, o.Scenario, rig.Length().Round(time.Second), o.Seed)
	progress := newRehearseProgress(stderr)
	published := 0
	err = rehearsal.Run(ctx, rig, func(ctx context.Context, due int64) error {
		if err := waitUntil(ctx, due); err != nil {
			return err
		}
		note := ""
		if s := publisher.Stats(); !s.Connected {
			note = fmt.Sprintf("  broker away, %d messages wait: %s", s.Queued, s.LastFailure)
		}
		progress.show(rig.Status(), note)
		return nil
	}, func(ctx context.Context, m rehearsal.Message) error {
		published++
		return publisher.Publish(ctx, m.Topic, m.Payload)
	})
	progress.end()
	if err != nil && ctx.Err() == nil {
		return err
	}
	drain, cancel := context.WithTimeout(running, drainBroker)
	defer cancel()
	err = publisher.Flush(drain)
	_, _ = fmt.Fprintf(stdout, "%d messages published, %d acknowledged by the broker\n", published, publisher.Stats().Acknowledged)
	if err != nil {
		return fmt.Errorf("broker %s has not acknowledged all messages within %v: %s", broker.URL, drainBroker, publisher.Stats().LastFailure)
	}
	return nil
}

// waitUntil waits for a time, ns UTC, or the end of ctx.
func waitUntil(ctx context.Context, due int64) error {
	left := time.Until(time.Unix(0, due))
	if left <= 0 {
		return ctx.Err()
	}
	timer := time.NewTimer(left)
	defer timer.Stop()
	select {
	case <-timer.C:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// rehearseProgress is the progress line: rewritten in place on a terminal, a line of
// its own elsewhere.
type rehearseProgress struct {
	w        io.Writer
	terminal bool
	next     time.Time
}

func newRehearseProgress(w io.Writer) *rehearseProgress {
	p := &rehearseProgress{w: w}
	if f, ok := w.(*os.File); ok {
		info, err := f.Stat()
		p.terminal = err == nil && info.Mode()&os.ModeCharDevice != 0
	}
	return p
}

// show prints the state at most once a second. A progress line that cannot be
// written stops no rehearsal.
func (p *rehearseProgress) show(s rehearsal.Status, note string) {
	now := time.Now()
	if now.Before(p.next) {
		return
	}
	p.next = now.Add(time.Second)
	const zeroC = 273.15
	line := fmt.Sprintf("%4.0f of %.0f s  %-19s  %5.0f rpm  NPR %5.3f  EGT %3.0f °C%s",
		s.Elapsed.Seconds(), s.Total.Seconds(), s.Segment, s.Speed, s.NPR, s.EGT-zeroC, note)
	if p.terminal {
		_, _ = fmt.Fprintf(p.w, "\r%s\x1b[K", line)
		return
	}
	_, _ = fmt.Fprintln(p.w, line)
}

// end leaves the progress line.
func (p *rehearseProgress) end() {
	if p.terminal {
		_, _ = fmt.Fprintln(p.w)
	}
}
