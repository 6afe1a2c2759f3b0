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

// rehearseCommand lets a simulated rig publish a whole test over MQTT. It gives 0
// at the end of the test, of --for or of ctx, 1 when the rig file or the broker
// does not allow it, 2 when called wrongly.
func rehearseCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	flags := pflag.NewFlagSet("rehearse", pflag.ContinueOnError)
	flags.SetOutput(stderr)
	flags.SortFlags = false
	var (
		play      = newRehearseFlags(flags)
		brokerURL = flags.String("broker", rehearseBroker, "broker to publish to, mqtt://host:port or mqtts://host:port")
		length    = flags.Duration("for", 0, "stop after this time; 0 is at the end of the test")
	)
	tell := func(format string, args ...any) {
		_, _ = fmt.Fprintf(stderr, format+"\n", args...) // there is nowhere left to tell a fault
	}
	flags.Usage = func() {
		tell("throatwatch rehearse RIG.yaml [flags]\n\nA simulated engine on the rig of the rig file publishes a whole test over MQTT.\n\n%s\n%s", flags.FlagUsages(), rehearseFaults())
	}
	if err := flags.Parse(args); err != nil {
		if errors.Is(err, pflag.ErrHelp) {
			return 0
		}
		tell("rehearse: %v", err)
		return 2
	}
	options, err := play.options()
	switch {
	case flags.NArg() != 1:
		flags.Usage()
		return 2
	case *length < 0:
		err = fmt.Errorf("--for %v: give a time above 0", *length)
	}
	if err != nil {
		tell("rehearse: %v", err)
		return 2
	}
	_, cfg, faults := config.Load(flags.Arg(0))
	if len(faults) > 0 {
		for _, f := range faults {
			tell("%v", f)
		}
		tell("rehearse: %d faults in %s", len(faults), flags.Arg(0))
		return 1
	}
	if err := rehearseLive(ctx, cfg, options, *brokerURL, *length, stdout, stderr); err != nil {
		tell("rehearse: %v", err)
		return 1
	}
	return 0
}

// rehearseFlags are the flags that say what is played.
type rehearseFlags struct {
	seed   *uint64
	quick  *bool
	rate   *float64
	speed  *float64
	faults *[]string
}

func newRehearseFlags(flags *pflag.FlagSet) rehearseFlags {
	return rehearseFlags{
		seed:   flags.Uint64("seed", 1, "number that all chance comes from; the same gives the same readings"),
		quick:  flags.Bool("quick", false, "the events of a test within a minute"),
		rate:   flags.Float64("rate", 50, "packs of readings per second"),
		speed:  flags.Float64("speed", 1, "let the test pass this many times faster; allowances and delays stay in real time"),
		faults: flags.StringArray("fault", nil, "a fault, name@time[+duration][:channel]; may be given more than once"),
	}
}

// options gives the options without the start; its error names every bad fault.
func (f rehearseFlags) options() (rehearsal.Options, error) {
	o := rehearsal.Options{Seed: *f.seed, Rate: *f.rate, Speed: *f.speed}
	if *f.quick {
		o.Scenario = rehearsal.Quick
	}
	var bad []error
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

// rehearseLive publishes the test in real time; device time is this machine's.
func rehearseLive(ctx context.Context, cfg pipeline.Config, o rehearsal.Options, url string, length time.Duration, stdout, stderr io.Writer) error {
	// What cannot be played is found before anyone waits for a broker.
	if _, err := rehearsal.New(cfg, o); err != nil {
		return err
	}
	publisher, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: url})
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
		return fmt.Errorf("broker %s is not reached: %s; start `throatwatch watch` first, or give --broker", url, publisher.Stats().LastFailure)
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
		return fmt.Errorf("broker %s has not acknowledged all messages within %v: %s", url, drainBroker, publisher.Stats().LastFailure)
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
