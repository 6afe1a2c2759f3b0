// Package faults does to a running watch what may happen to it at a rig, and counts
// what becomes of the data: its process is killed, its broker restarted, its link cut,
// while a data system publishes a test with device time at QoS 1. In the end every
// sample that the broker has accepted must be in the scans exactly once.
//
// Daemon and site broker are processes of their own, so that they can be killed. The
// data system lives in this process and outlives them. It notes what it publishes; all
// of it is acknowledged by the broker before anything is counted.
package faults

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"path/filepath"
	"strconv"
	"text/tabwriter"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/rules/pipeline"
)

// Options say what is done. Program, Rig, Dir and Data are required.
type Options struct {
	Program []string // throatwatch, with arguments that come before its own
	Env     []string // further environment of it
	Rig     string   // rig file
	Dir     string   // for the broker's files
	Data    string   // data folders; where a disk is slow the daemon rightly stops recording
	// How often each fault is done: kills with a site broker and with the embedded one,
	// restarts of the site broker, cuts of the link to it, and times that the link loses
	// what it carries with its connections open.
	SiteKills, EmbeddedKills, Restarts, Cuts, Silences int

	Rate  float64 // packs per second of the data system; 0 = 100
	Speed float64 // of the rehearsed test; 0 = 1
	Seed  uint64

	// Progress, if set, is told each fault as it is done.
	Progress func(name string, done, of int)
}

// Counts is what became of the data of one campaign.
type Counts struct {
	Name     string `json:"name"`
	Faults   int    `json:"faults"`
	Lives    int    `json:"lives"`    // of the daemon, of which a record is there
	Accepted int    `json:"accepted"` // messages acknowledged by the broker
	Recorded int    `json:"recorded"` // of these, in the records
	Again    int    `json:"again"`    // messages that came more than once
	Samples  int    `json:"samples"`  // in the accepted messages, due in the scans
	InScans  int    `json:"in_scans"` // of these
	Missing  int    `json:"missing"`  // messages not recorded, and samples in no scan that are not counted as late
	Doubled  int    `json:"doubled"`  // samples in the scans more than once
	Late     int    `json:"late"`     // samples that came after their scan was closed: recorded, and in no scan
	Gaps     int    `json:"gaps"`     // gap records: stretches that were watched and not stored
	Scans    int    `json:"scans"`
	Skipped  int    `json:"skipped"` // scans that are missing between others

	// Silent tells that the link was silent with its connections open. Until the watch
	// finds it deaf it cannot know that something will still come, and does not wait for
	// it: stale data must be seen to be stale at once.
	Silent bool `json:"silent"`
}

// Lossless tells whether every accepted sample is in the scans exactly once; if the
// link was silent, whether those that are not are counted as late.
func (c *Counts) Lossless() bool {
	return c.Accepted > 0 && c.Missing == 0 && c.Doubled == 0 && c.Gaps == 0 && c.Skipped == 0 &&
		c.Recorded == c.Accepted && c.InScans+c.Late == c.Samples && (c.Late == 0 || c.Silent)
}

// campaign is one kind of fault, done again and again to one watch.
type campaign struct {
	name   string
	times  int
	site   bool // the broker is one of its own, and outlives the daemon
	linked bool // the daemon reaches it by a link that can be cut
	silent bool // which is silent with its connections open
	fault  func(context.Context, *bed, int) error
}

// bed is what a campaign is done to.
type bed struct {
	o      *Options
	random *rand.Rand
	args   []string
	daemon *daemon
	broker *mosquitto // nil with the embedded broker
	link   *link      // nil where the daemon reaches it directly
}

func campaigns(o *Options) []campaign {
	return []campaign{
		{name: "kill -9, site broker", times: o.SiteKills, site: true, fault: kill},
		{name: "kill -9, embedded broker", times: o.EmbeddedKills, fault: kill},
		{name: "site broker restarted", times: o.Restarts, site: true, fault: restart},
		{name: "link to the site broker cut", times: o.Cuts, site: true, linked: true, fault: cut},
		{name: "link silent for 3 to 6 s", times: o.Silences, site: true, linked: true, silent: true, fault: silence},
	}
}

// Run does all campaigns that have a number of faults, one after the other, and calls
// each with the counts as they come.
func Run(ctx context.Context, o Options, each func(*Counts)) error {
	_, cfg, found := config.Load(o.Rig)
	if err := watch.Faults(found); err != nil {
		return err
	}
	if o.Rate == 0 {
		o.Rate = 100
	}
	if o.Progress == nil {
		o.Progress = func(string, int, int) {}
	}
	for i, c := range campaigns(&o) {
		if c.times == 0 {
			continue
		}
		data := filepath.Join(o.Data, "campaign-"+strconv.Itoa(i))
		counts, err := c.run(ctx, &o, &cfg, data, o.Seed+uint64(i))
		if err != nil {
			return fmt.Errorf("%s: %w", c.name, err)
		}
		each(counts)
	}
	return nil
}

// run does one campaign with a data folder of its own and counts.
func (c *campaign) run(ctx context.Context, o *Options, cfg *pipeline.Config, data string, seed uint64) (counts *Counts, err error) {
	b := &bed{o: o, random: rand.New(rand.NewPCG(seed, 1))}
	b.args = []string{"watch", o.Rig, "--data", data, "--listen", "127.0.0.1:0"}
	address, err := freeAddress(ctx)
	if err != nil {
		return nil, err
	}
	if c.site {
		if b.broker, err = startMosquitto(ctx, o.Dir, address); err != nil {
			return nil, err
		}
		defer func() { err = errors.Join(err, b.broker.stop()) }()
		to := address
		if c.linked {
			if b.link, err = newLink(ctx, address); err != nil {
				return nil, err
			}
			defer b.link.close()
			to = b.link.address
		}
		b.args = append(b.args, "--broker", "mqtt://"+to)
	} else {
		b.args = append(b.args, "--broker-listen", address)
	}
	if b.daemon, err = b.start(ctx); err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, b.daemon.kill()) }()
	if err := b.daemon.until(ctx, cfg.Rig.ID, func(h *hello) bool { return h.connected() }); err != nil {
		return nil, fmt.Errorf("its sessions: %w", err)
	}
	system, err := play(ctx, *cfg, "mqtt://"+address, o, seed)
	if err != nil {
		return nil, err
	}
	defer system.close()
	for i := range c.times {
		if err := errors.Join(c.fault(ctx, b, i), ctx.Err()); err != nil {
			return nil, fmt.Errorf("fault %d: %w", i+1, err)
		}
		o.Progress(c.name, i+1, c.times)
	}
	if err := system.end(ctx); err != nil {
		return nil, fmt.Errorf("the data system: %w", err)
	}
	if _, err := b.daemon.address(ctx); err != nil {
		return nil, err
	}
	// The scans must have come past the last sample, and the run, if it is about to end
	// by itself, to its end.
	if err := b.daemon.until(ctx, cfg.Rig.ID, func(h *hello) bool { return h.Point.After(system.last()) }); err != nil {
		return nil, fmt.Errorf("its last scan: %w", err)
	}
	short, cancel := context.WithTimeout(ctx, runEnds)
	_ = b.daemon.until(short, cfg.Rig.ID, func(h *hello) bool { return h.Run == nil }) // it need not
	cancel()
	if err := b.daemon.stop(); err != nil {
		return nil, err
	}
	if counts, err = Count(ctx, data, cfg, system.published); err != nil {
		return nil, err
	}
	counts.Name, counts.Faults, counts.Silent = c.name, c.times, c.silent
	return counts, nil
}

const (
	longest = 3000 * time.Millisecond // between two faults
	runEnds = 5 * time.Second
)

// pause waits for a random time.
func (b *bed) pause(ctx context.Context, least, most time.Duration) error {
	return wait(ctx, least+time.Duration(b.random.Int64N(int64(most-least))))
}

func (b *bed) start(ctx context.Context) (*daemon, error) {
	return startDaemon(ctx, b.o.Program, b.o.Env, b.args)
}

// kill kills the daemon at any moment: while it runs, and each fifth time while it
// starts. Every other time nobody restarts it at once.
func kill(ctx context.Context, b *bed, i int) error {
	least, most := 100*time.Millisecond, longest
	if i%5 == 4 {
		least, most = 0, 500*time.Millisecond
	} else if _, err := b.daemon.address(ctx); err != nil {
		return err
	}
	if err := b.pause(ctx, least, most); err != nil {
		return err
	}
	if err := b.daemon.kill(); err != nil {
		return err
	}
	if i%2 == 1 {
		if err := b.pause(ctx, 0, longest/2); err != nil {
			return err
		}
	}
	d, err := b.start(ctx)
	if err == nil {
		b.daemon = d
	}
	return err
}

// restart ends the site broker in an orderly way, so that it stores what it holds, and
// starts it again at once or after a while.
func restart(ctx context.Context, b *bed, _ int) error {
	if err := b.pause(ctx, 500*time.Millisecond, longest); err != nil {
		return err
	}
	if err := b.broker.stop(); err != nil {
		return err
	}
	if err := b.pause(ctx, 0, time.Second); err != nil {
		return err
	}
	return b.broker.start(ctx)
}

// cut resets the link.
func cut(ctx context.Context, b *bed, _ int) error {
	err := b.pause(ctx, 500*time.Millisecond, longest)
	b.link.cut()
	return err
}

// silence makes the link lose what it carries for longer than the daemon takes to find
// its input path deaf.
func silence(ctx context.Context, b *bed, i int) error {
	err := b.pause(ctx, 500*time.Millisecond, longest)
	b.link.lose(true)
	err = errors.Join(err, b.pause(ctx, longest, 2*longest))
	b.link.lose(false)
	return errors.Join(err, cut(ctx, b, i))
}

// WriteTable writes a line for each campaign.
func WriteTable(w io.Writer, all []*Counts) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', tabwriter.AlignRight)
	write := func(format string, args ...any) { _, _ = fmt.Fprintf(t, format, args...) } // Flush gives the error
	write("campaign\tfaults\tlives\taccepted\trecorded\tcame again\tsamples\tin scans\tmissing\tdoubled\tlate\tgaps\t\n")
	for _, c := range all {
		write("%s\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t%d\t\n",
			c.Name, c.Faults, c.Lives, c.Accepted, c.Recorded, c.Again, c.Samples, c.InScans, c.Missing, c.Doubled, c.Late, c.Gaps)
	}
	return t.Flush()
}

// WriteJSON writes all counts as an array.
func WriteJSON(w io.Writer, all []*Counts) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(all)
}
