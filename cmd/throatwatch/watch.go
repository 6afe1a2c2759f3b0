package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/pair"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// notProtection stands wherever a person could think otherwise.
const notProtection = "It only watches. Facility safety procedures, hard-wired protection and licensed practice come first."

// watchOptions are the flags of `throatwatch watch`.
type watchOptions struct {
	listen, data, brokerListen string
	broker                     brokerOptions
	remote                     bool
	card                       string
	rehearse                   bool
	play                       rehearseFlags
	influx                     influxOptions
	webhook                    webhookOptions
	guard                      guardOptions
	pair                       pairOptions
	retainDays                 int
	retainGB                   float64
	diskHours, diskGB          float64
	limit                      time.Duration
	verbose                    bool
}

func watchCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	var o watchOptions
	fs := newFlags("watch RIG.yaml", "Watch a rig: take its messages in, compute, alarm, store, and serve the page.", stderr)
	o.flags(fs)
	rig, code := parseRig(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if err := o.check(fs); err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch watch:", err)
		return 2
	}
	if o.limit > 0 {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, o.limit)
		defer cancel()
	}
	w := &watcher{opt: o, stdout: stdout, stderr: stderr, log: newLog(stderr, o.verbose), disk: diskWatch{part: part{ok: true}}, listens: make(chan struct{})}
	if err := w.run(ctx, rig); err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch watch:", err)
		return 1
	}
	return 0
}

func (o *watchOptions) flags(fs *pflag.FlagSet) {
	fs.StringVar(&o.listen, "listen", "127.0.0.1:8189", "address of the page and the HTTP interface")
	fs.StringVar(&o.data, "data", "data", "folder for runs, catalogue and broker store")
	fs.StringVar(&o.brokerListen, "broker-listen", "127.0.0.1:1883", "address of the embedded broker; port 0 takes a free one")
	o.broker.flags(fs, "", "site broker instead of the embedded one, mqtt://host:port or mqtts://host:port; the nodes of a cluster separated by commas")
	fs.BoolVar(&o.remote, "allow-remote", false, "let --listen be reached from other machines without TLS and users, and --broker-listen without passwords")
	o.guard.flags(fs)
	fs.StringVar(&o.card, "card", "", "test card to load at the start; card load does so later")
	fs.BoolVar(&o.rehearse, "rehearse", false, "let a simulated rig publish a test to the broker; the next flags say which")
	o.play = newRehearseFlags(fs)
	o.influx.flags(fs)
	o.webhook.flags(fs)
	o.pair.flags(fs)
	fs.IntVar(&o.retainDays, "retain-days", 0, "remove runs that ended longer ago, except those marked keep (default: none)")
	fs.Float64Var(&o.retainGB, "retain-gb", 0, "remove the oldest runs until the rest takes no more GB (10^9 bytes), except those marked keep (default: none)")
	fs.Float64Var(&o.diskHours, "disk-hours", 4, "alarm when the disk of the data folder will be full in so many hours as it fills now; 0 = do not")
	fs.Float64Var(&o.diskGB, "disk-gb", 2, "alarm when it has fewer GB (10^9 bytes) left; 0 = do not")
	fs.DurationVar(&o.limit, "for", 0, "stop after this time (default: on interrupt)")
	fs.BoolVar(&o.verbose, "verbose", false, "log what the parts do")
}

// check finds what cannot be meant, before anything is touched.
func (o *watchOptions) check(fs *pflag.FlagSet) error {
	if o.retainDays < 0 || !(o.retainGB >= 0) {
		return errors.New("--retain-days and --retain-gb: give numbers above 0")
	}
	if !(o.diskHours >= 0 && o.diskHours < 1e5) || !(o.diskGB >= 0) {
		return errors.New("--disk-hours and --disk-gb: give numbers above 0, or 0 for no alarm; at most 100000 hours")
	}
	if o.limit < 0 {
		return fmt.Errorf("--for %v: give a time above 0", o.limit)
	}
	host, _, err := net.SplitHostPort(o.listen)
	if err != nil {
		return fmt.Errorf("--listen %q is no address: give host:port", o.listen)
	}
	if err := o.guard.check(fs); err != nil {
		return err
	}
	if !o.remote && !loopback(host) && !o.guard.closed() {
		return fmt.Errorf("--listen %s can be reached from other machines, and whoever reaches it can acknowledge alarms: use 127.0.0.1, or --users with --tls-cert and --tls-key, or --allow-remote on a closed network", o.listen)
	}
	if o.broker.url != "" && fs.Changed("broker-listen") {
		return errors.New("--broker-listen is for the embedded broker, --broker names another: give one of them")
	}
	if err := o.broker.check(); err != nil {
		return err
	}
	if err := o.pair.check(o.broker.url); err != nil {
		return err
	}
	if !o.rehearse {
		for _, name := range []string{"seed", "quick", "points", "rate", "speed", "rest", "fault"} {
			if fs.Changed(name) {
				return fmt.Errorf("--%s says what is rehearsed: add --rehearse", name)
			}
		}
	}
	_, err = o.play.options()
	return err
}

// retention gives which runs are kept.
func (o *watchOptions) retention() runfile.Retention {
	return runfile.Retention{Age: int64(o.retainDays) * 24 * int64(time.Hour), Bytes: int64(o.retainGB * 1e9)}
}

// watcher is the daemon: its parts, started and stopped in order.
type watcher struct {
	opt    watchOptions
	stdout io.Writer
	stderr io.Writer
	log    *slog.Logger

	rig    string          // its file
	cfg    pipeline.Config // in force at the start
	store  *watch.Store
	broker *broker.Broker
	client *mqtt.Client
	loop   *watch.Loop
	site   *siteDatabase // nil when the site has none
	hook   *receiver     // nil when the site has none
	disk   diskWatch
	guard  *guard     // nil when nobody is asked who they are
	pair   *pair.Pair // nil when no other watch stands over the rig

	manager *serviceManager // nil where nobody manages this
	listens chan struct{}   // closed when the broker keeps messages for this watch
}

// run starts the parts in the order in which they need each other and stops them
// the other way round: who feeds the loop first, then the loop, which stores what
// it has and acknowledges it, then the broker session, then the files.
func (w *watcher) run(ctx context.Context, rig string) (err error) {
	bundle, cfg, faults := config.Load(rig)
	if err := watch.Faults(faults); err != nil {
		return fmt.Errorf("the configuration has faults; nothing was started:\n%w", err)
	}
	if w.opt.rehearse {
		if err := rehearsable(cfg, w.opt.play); err != nil {
			return err
		}
	}
	if w.manager, err = openServiceManager(ctx, os.Getenv, w.log); err != nil {
		return err
	}
	defer w.manager.close()
	if w.opt.card != "" {
		_, _, faults := config.LoadCard(w.opt.card, &cfg)
		if err := faultsOf("the test card has faults; nothing was started", faults); err != nil {
			return err
		}
	}
	if w.guard, err = w.opt.guard.open(w.log); err != nil {
		return err
	}
	secure, err := w.opt.guard.tls()
	if err != nil {
		return err
	}
	unlock, err := watch.Lock(w.opt.data)
	if err != nil {
		return err
	}
	defer unlock()
	if w.store, err = watch.OpenStore(ctx, w.opt.data, runfile.Options{}, w.log); err != nil {
		return err
	}
	defer func() {
		if !errors.Is(err, watch.ErrHangs) { // the files are in the hands of the disk
			err = errors.Join(err, w.store.Close(context.WithoutCancel(ctx)))
		}
	}()
	core, err := w.store.Restore(ctx, pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH)
	if err != nil {
		return err
	}
	w.rig, w.cfg = rig, w.inForce(core, cfg)
	if w.site, err = w.opt.influx.open(w.store, w.opt.data, w.cfg.Rig.ID, w.log); err != nil {
		return err
	}
	if w.site != nil {
		core.ChunkFor = watch.SinkChunkFor
	}
	if w.hook, err = w.opt.webhook.open(w.store, w.opt.data, cfg.Rig.ID, w.held, w.log); err != nil {
		return err
	}
	epoch, err := watch.NextEpoch(w.opt.data, core.State.Epoch)
	if err != nil {
		return err
	}
	past, err := w.store.Past(ctx, core.State)
	if err != nil {
		return err
	}
	listener, err := w.listen(ctx)
	if err != nil {
		return err
	}
	defer listener.Close() //nolint:errcheck // the server has closed it
	stopBroker, err := w.connect(ctx)
	if err != nil {
		return err
	}
	defer stopBroker()

	hub := dashboard.NewHub(watch.Build())
	outbox := watch.NewOutbox(w.cfg.Rig.ID, w.client, w.log)
	if w.pair != nil {
		hub.Speaking, outbox.Speaking, outbox.Speaks = w.speaking, w.speaking, w.pair.Speaks
	}
	w.loop = watch.NewLoop(watch.Config{
		Core: core, Store: w.store, Ack: w.client, Window: mqtt.DefaultWindow, Log: w.log,
		Shown: func(outs []pipeline.Outcome, m *pipeline.Machine, s *pipeline.State) {
			hub.Publish(outs, m, s)
			outbox.Take(outs, m, s)
			if w.hook != nil {
				w.hook.transitions.Show(w.hook.sender, outs, s)
			}
		},
	})
	if w.pair != nil {
		w.pair.Join(w.loop)
	}
	server := &http.Server{
		Handler: dashboard.NewServer(w.page(secure != nil), hub), TLSConfig: secure,
		ReadHeaderTimeout: 5 * time.Second, IdleTimeout: 2 * time.Minute, MaxHeaderBytes: 32 << 10,
		ErrorLog: slog.NewLogLogger(w.log.Handler(), slog.LevelDebug),
	}

	clientCtx, stopClient := context.WithCancel(context.WithoutCancel(ctx))
	loopCtx, stopLoop := context.WithCancel(context.WithoutCancel(ctx))
	sideCtx, stopSide := context.WithCancel(ctx) // server, outbox, sink, rehearsal
	var clientParts, sideParts sync.WaitGroup
	loopEnd := make(chan error, 1)
	failed := make(chan error, 4)
	clientParts.Go(func() { _ = w.client.Run(clientCtx) })
	clientParts.Go(func() { w.pump(loopCtx) })
	clientParts.Go(func() { w.report(loopCtx) })
	go func() {
		loopEnd <- w.loop.Run(loopCtx, pipeline.Boot{Epoch: epoch, Build: watch.Build(), GOARCH: runtime.GOARCH, Past: past}, bundle.Marshal())
	}()
	sideParts.Go(func() {
		serve := server.Serve
		if secure != nil {
			serve = func(l net.Listener) error { return server.ServeTLS(l, "", "") }
		}
		if err := serve(listener); !errors.Is(err, http.ErrServerClosed) {
			failed <- fmt.Errorf("page: %w", err)
		}
	})
	sideParts.Go(func() { outbox.Run(sideCtx) })
	if w.pair != nil {
		sideParts.Go(func() { w.pair.Run(sideCtx) })
	}
	sideParts.Go(func() { w.store.Retain(sideCtx, w.opt.retention()) })
	if w.site != nil {
		sideParts.Go(func() { w.site.run(sideCtx) })
	}
	if w.hook != nil {
		sideParts.Go(func() { w.hook.run(sideCtx) })
	}
	go w.disk.run(sideCtx, w.opt.data, watch.Disk{Floor: w.opt.diskGB * 1e9, Ahead: time.Duration(w.opt.diskHours * float64(time.Hour))})
	sideParts.Go(func() { w.watchParts(sideCtx) })
	if w.guard != nil {
		sideParts.Go(func() { w.guard.run(sideCtx) })
	}
	w.announce(listener.Addr().String())
	sideParts.Go(func() { w.manager.watch(sideCtx, w.loop, w.listens) })
	if err := w.beginCard(ctx); err != nil {
		failed <- err
	}
	sideParts.Go(func() {
		if err := w.letIn(sideCtx); err != nil && sideCtx.Err() == nil {
			failed <- err
		}
	})

	select {
	case <-ctx.Done():
	case err = <-failed:
	case err = <-loopEnd:
		loopEnd <- nil
	}
	w.manager.tell("STOPPING=1")
	stopSide()
	hub.Shutdown()
	closing, cancel := context.WithTimeout(context.WithoutCancel(ctx), 2*time.Second)
	defer cancel()
	_ = server.Shutdown(closing)
	sideParts.Wait()
	stopLoop()
	err = errors.Join(err, <-loopEnd)
	stopClient()
	clientParts.Wait()
	return err
}

// checkSwap tells what is wrong with the calibration of a new sensor.
func checkSwap(bundle []byte, channel, serial, calibration string) []dashboard.Fault {
	_, faults := config.WithSwaps(bundle, []config.Swapped{{Channel: channel, Serial: serial, ValidFrom: 1, Calibration: calibration}})
	return shownFaults(faults)
}

// page sets the server of the page up.
func (w *watcher) page(secure bool) dashboard.Config {
	c := dashboard.Config{
		Desk: w.loop, Runs: watch.StoredRuns{Catalog: w.store.Catalog(), Store: w.store}, Parse: watch.Parse,
		Build: watch.Build(), Log: w.log, Extra: w.metrics, Reload: w.reload, ParseCard: parseCard, CheckSwap: checkSwap,
		Free:     func() float64 { free, _ := watch.FreeSpace(w.opt.data); return free }, // 0 where that is not known
		OpenRole: w.opt.guard.role(), Secure: secure, Audit: newLog(w.stderr, true),
	}
	if w.pair != nil {
		c.Desk = w.pair
	}
	if w.site != nil {
		c.Follows = append(c.Follows, "database")
	}
	if w.hook != nil {
		c.Follows = append(c.Follows, "webhook")
	}
	if w.guard != nil {
		c.Access = w.guard.gate
	} else {
		c.Local = !w.opt.remote && !w.opt.guard.closed()
	}
	return c
}

// listen opens the port of the page.
func (w *watcher) listen(ctx context.Context) (net.Listener, error) {
	l, err := (&net.ListenConfig{}).Listen(ctx, "tcp", w.opt.listen)
	if inUse(err) {
		return nil, fmt.Errorf("--listen %s: another program listens there, perhaps another watch: give another address, or port 0 for a free one", w.opt.listen)
	}
	if err != nil {
		return nil, fmt.Errorf("--listen: %w", err)
	}
	return l, nil
}

// inUse tells that an address is taken; of an error of the broker only the text says so.
func inUse(err error) bool {
	return errors.Is(err, addressInUse) || err != nil && strings.Contains(err.Error(), addressInUse.Error())
}

// connect starts the embedded broker, unless there is a site broker, and makes
// the client.
func (w *watcher) connect(ctx context.Context) (stop func(), err error) {
	site, err := w.opt.broker.publisher()
	if err != nil {
		return nil, err
	}
	c := mqtt.Config{
		URL: site.URL, Dir: w.opt.data, Username: site.Username, Password: site.Password, TLS: site.TLS,
		Will: &mqtt.Will{Topic: watch.StatusTopic(w.cfg.Rig.ID), Payload: watch.OfflineStatus(w.opt.pair.name)},
	}
	for _, in := range w.cfg.Align.Inputs {
		c.Filters = append(c.Filters, in.Filter)
	}
	stop = func() {}
	if err := w.join(c); err != nil {
		return nil, err
	}
	if w.opt.broker.url == "" {
		w.broker, err = broker.New(broker.Config{
			Listen: w.opt.brokerListen, AllowRemote: w.opt.remote, StoreDir: filepath.Join(w.opt.data, "broker"),
		}, w.log)
		if err != nil {
			return nil, err
		}
		if err := w.broker.Start(ctx); inUse(err) {
			return nil, fmt.Errorf("--broker-listen %s: another program listens there: if it is the site's broker, name it by --broker, else give another address", w.opt.brokerListen)
		} else if err != nil {
			return nil, fmt.Errorf("embedded broker: %w", err)
		}
		stop = func() {
			if err := w.broker.Close(); err != nil {
				w.log.Warn("embedded broker", "err", err)
			}
		}
		c.URL = w.broker.URL()
		c.Username, c.Password = w.broker.Own()
	}
	if w.client, err = mqtt.New(c); err != nil {
		stop()
		return nil, err
	}
	return stop, nil
}

// held is that of webhook.Config: a watch that is silent does not send.
func (w *watcher) held() (keep time.Duration, held bool) {
	if w.pair == nil {
		return 0, false
	}
	return w.pair.Held()
}

// pump feeds the loop with messages until either ends.
func (w *watcher) pump(ctx context.Context) {
	for m := range w.client.Messages() {
		if err := w.loop.PutMessage(ctx, m); err != nil {
			return
		}
	}
}

// report feeds the loop with what becomes of the broker sessions.
func (w *watcher) report(ctx context.Context) {
	deaf, down := map[int]bool{}, map[int]bool{}
	for e := range w.client.Events() {
		w.logEvent(&e, down)
		if e.Session == mqtt.PublisherSession {
			continue
		}
		var err error
		before := len(deaf)
		switch e.Kind {
		case mqtt.EventConnected:
			err = w.loop.Put(ctx, watch.Input{Kind: ingest.KindConnect, Topic: e.Filter})
		case mqtt.EventDisconnected:
			err = w.loop.Put(ctx, watch.Input{Kind: ingest.KindDisconnect, Topic: e.Filter})
			deaf[e.Session] = true
		case mqtt.EventRefused, mqtt.EventTakenOver, mqtt.EventDeaf:
			deaf[e.Session] = true
		case mqtt.EventHearing:
		}
		if e.Kind == mqtt.EventConnected || e.Kind == mqtt.EventHearing {
			delete(deaf, e.Session)
		}
		if (before == 0) != (len(deaf) == 0) && err == nil {
			err = w.loop.Health(ctx, pipeline.HealthChange{Part: pipeline.PartInputPath, OK: len(deaf) == 0, Why: e.String()})
		}
		if err != nil {
			return
		}
	}
}

// logEvent logs what becomes of a session: trouble, and its end, as a warning.
func (w *watcher) logEvent(e *mqtt.Event, down map[int]bool) {
	if e.Err == nil && !down[e.Session] {
		w.log.Info(e.String())
		return
	}
	w.log.Warn(e.String())
	if e.Err != nil {
		down[e.Session] = true
	} else {
		delete(down, e.Session)
	}
}

// letIn opens the embedded broker to publishers once the daemon's own sessions
// exist, and starts the rehearsal.
func (w *watcher) letIn(ctx context.Context) error {
	select {
	case <-w.client.Ready():
	case <-ctx.Done():
		return ctx.Err()
	}
	if w.broker != nil {
		w.broker.Open()
	}
	close(w.listens)
	if !w.opt.rehearse {
		return nil
	}
	to, err := w.opt.broker.publisher()
	if err != nil {
		return err
	}
	if w.broker != nil {
		to.URL = w.broker.URL()
	}
	o, err := w.opt.play.options()
	if err != nil {
		return err
	}
	return rehearseOver(ctx, w.cfg, o, to, 0, w.stdout, w.stderr)
}

// announce says what runs where.
func (w *watcher) announce(addr string) {
	rig := &w.cfg.Rig
	where := w.opt.broker.url
	if w.broker != nil {
		where = w.broker.URL() + " (embedded)"
	}
	dir, err := filepath.Abs(w.opt.data)
	if err != nil {
		dir = w.opt.data
	}
	if w.site != nil {
		dir += "\n  influx  " + w.site.target.String()
	}
	scheme := "http"
	if w.opt.guard.cert != "" {
		scheme = "https"
	}
	if w.hook != nil {
		dir += "\n  webhook " + w.hook.sender.Where()
	}
	if w.pair != nil {
		dir += "\n  pair    " + w.pair.Name()
	}
	topics := make([]string, len(w.cfg.Align.Inputs))
	for i, in := range w.cfg.Align.Inputs {
		topics[i] = in.Filter
	}
	_, _ = fmt.Fprintf(w.stdout, `throatwatch watches %s (%s), engine %s %s
  page    %s://%s/
  broker  %s
  topics  %s
  data    %s
  config  %.12s: %d channels, %.4g scans/s, %d rules, limits %s
%s
`, rig.Title, rig.ID, rig.EngineModel, rig.EngineSerial, scheme, addr, where, strings.Join(topics, "  "), dir, w.cfg.Hash,
		len(w.cfg.Compute.Channels), 1e9/float64(w.cfg.Align.Period), len(w.cfg.Rules), rig.LimitsVersion, notProtection)
}

// metrics gives the figures of the broker sessions.
func (w *watcher) metrics() []dashboard.Metric {
	var out []dashboard.Metric
	if w.site != nil {
		out = w.site.metrics()
	}
	if w.hook != nil {
		out = append(out, w.hook.metrics()...)
	}
	if w.pair != nil {
		out = append(out, w.pairMetrics()...)
	}
	out = append(out, dashboard.Metric{Name: "disk_free_bytes", Help: "What is left on the disk of the data folder.", Value: w.disk.standing().behind * 1e9})
	for _, s := range w.client.Stats() {
		labels := map[string]string{"filter": s.Filter}
		out = append(out,
			dashboard.Metric{Name: "session_unacknowledged", Help: "Messages delivered and not yet acknowledged.", Labels: labels, Value: float64(s.Unacked)},
			dashboard.Metric{Name: "session_received_total", Help: "Deliveries, copies included.", Total: true, Labels: labels, Value: float64(s.Received)},
			dashboard.Metric{Name: "session_dropped_total", Help: "Deliveries that found the input queue full; the broker sends them again.", Total: true, Labels: labels, Value: float64(s.Dropped)},
		)
	}
	return out
}

// newFlags gives a flag set that explains itself.
func newFlags(usage, what string, stderr io.Writer) *pflag.FlagSet {
	name, _, _ := strings.Cut(usage, " ")
	fs := pflag.NewFlagSet(name, pflag.ContinueOnError)
	fs.SetOutput(stderr)
	fs.SortFlags = false
	fs.Usage = func() {
		_, _ = fmt.Fprintf(stderr, "usage: throatwatch %s\n\n%s\n\n%s\n%s\n", usage, what, fs.FlagUsages(), notProtection)
	}
	return fs
}

// parseRig parses flags and the one rig file; code is below 0 when all is well.
func parseRig(fs *pflag.FlagSet, args []string, stderr io.Writer) (rig string, code int) {
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return "", code
	}
	if len(rest) != 1 {
		_, _ = fmt.Fprintf(stderr, "throatwatch %s: give one rig file, as in testdata/rigs/example.yaml (%d arguments were given)\n", fs.Name(), len(rest))
		return "", 2
	}
	return rest[0], -1
}

func parseArgs(fs *pflag.FlagSet, args []string, stderr io.Writer) (rest []string, code int) {
	if err := fs.Parse(args); err != nil {
		if errors.Is(err, pflag.ErrHelp) {
			return nil, 0
		}
		_, _ = fmt.Fprintf(stderr, "throatwatch %s: %v (--help lists the flags)\n", fs.Name(), err)
		return nil, 2
	}
	return fs.Args(), -1
}

// readSecret reads a password from a file; "" when there is none.
func readSecret(path string) (string, error) {
	if path == "" {
		return "", nil
	}
	b, err := os.ReadFile(path)
	if err != nil {
		return "", fmt.Errorf("password file: %w", err)
	}
	return strings.TrimRight(string(b), "\r\n"), nil
}

// newLog gives the daemon's log: warnings, or everything.
func newLog(w io.Writer, verbose bool) *slog.Logger {
	level := slog.LevelWarn
	if verbose {
		level = slog.LevelInfo
	}
	return slog.New(slog.NewTextHandler(w, &slog.HandlerOptions{Level: level}))
}
