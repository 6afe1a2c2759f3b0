package main

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"path/filepath"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/monitor/influx"
)

// influxOptions are the flags that say which database of the site gets what is
// recorded. Without a URL there is none.
type influxOptions struct {
	url, org, bucket, tokenFile string
}

func (o *influxOptions) flags(fs *pflag.FlagSet) {
	fs.StringVar(&o.url, "influx", "", "site database that gets what is recorded, by the InfluxDB 2 API, http://host:port (default: none)")
	fs.StringVar(&o.org, "influx-org", "", "organisation in the database; none for InfluxDB 1.8")
	fs.StringVar(&o.bucket, "influx-bucket", "", "bucket in the database; database/retention-policy for InfluxDB 1.8")
	fs.StringVar(&o.tokenFile, "influx-token-file", "", "file with the token for the database; user:password for InfluxDB 1.8")
}

// siteDatabase keeps the site's database up with what is recorded.
type siteDatabase struct {
	target   influx.Target
	rejected string // file of lines that the database refuses
	outcomes *watch.Outcomes
	sink     *influx.Sink
	log      *slog.Logger
	told     influx.Status // last time; belongs to run
}

// open gives the site's database, nil when there is none. Its files lie in dir.
func (o influxOptions) open(s *watch.Store, dir, rig string, log *slog.Logger) (*siteDatabase, error) {
	if o.url == "" {
		if o != (influxOptions{}) {
			return nil, errors.New("flags for the site's database are given without its address: add --influx http://host:port")
		}
		return nil, nil //nolint:nilnil // a site without a database is no error
	}
	token, err := readSecret(o.tokenFile)
	if err != nil {
		return nil, fmt.Errorf("--influx-token-file: %w", err)
	}
	d := &siteDatabase{
		target:   influx.Target{URL: o.url, Org: o.org, Bucket: o.bucket, Token: token},
		rejected: filepath.Join(dir, "influx-rejected.lp"), outcomes: watch.NewOutcomes(s, log), log: log,
	}
	d.sink, err = influx.New(influx.Config{
		Target: d.target, Rig: rig, Source: d.outcomes, Rejected: d.rejected, Changed: d.tell,
		Cursor: watch.CursorFile{Path: filepath.Join(dir, "influx-cursor.json"), Target: d.target.String()},
	})
	if err != nil {
		return nil, fmt.Errorf("--influx: %w", err)
	}
	return d, nil
}

// run writes until ctx ends.
func (d *siteDatabase) run(ctx context.Context) {
	watch.RunSink(ctx, d.sink)
	if err := d.outcomes.Close(); err != nil {
		d.log.Warn("site database", "err", err)
	}
}

// tell logs what changed.
func (d *siteDatabase) tell(st influx.Status) {
	before := d.told
	d.told = st
	if st.Rejected > before.Rejected {
		d.log.Error("the site database refuses lines; they are kept", "file", d.rejected, "lines", st.Rejected-before.Rejected, "reason", st.Reason)
	}
	if st.State == before.State {
		return
	}
	switch target := d.target.String(); st.State {
	case influx.Working:
		d.log.Warn("the site database takes what is recorded again", "target", target)
	case influx.Refused:
		d.log.Error("the site database refuses what is recorded: somebody has to change something; it is tried every 5 min", "target", target, "err", st.Err)
	case influx.Waiting:
		d.log.Warn("the site database does not take what is recorded: it waits in the data folder", "target", target, "err", st.Err)
	}
}

// metrics gives the figures of the sink.
func (d *siteDatabase) metrics() []dashboard.Metric {
	st := d.sink.Status()
	lag, working := math.NaN(), 0.0
	if st.Through != 0 {
		lag = max(0, time.Since(time.Unix(0, st.Through)).Seconds())
	}
	if st.State == influx.Working {
		working = 1
	}
	total := func(name, help string, v uint64) dashboard.Metric {
		return dashboard.Metric{Name: name, Help: help, Total: true, Value: float64(v)}
	}
	return []dashboard.Metric{
		{Name: "influx_working", Help: "1 while the site database takes what is recorded.", Value: working},
		{Name: "influx_lag_seconds", Help: "Age of what the site database lacks; it gets rows up to 10 s after they were computed. NaN before the first.", Value: lag},
		total("influx_written_total", "Lines that the site database has taken.", st.Written),
		total("influx_rejected_total", "Lines that it refused, kept in influx-rejected.lp.", st.Rejected),
		total("influx_expired_total", "Lines older than what it keeps.", st.Expired),
		total("influx_skipped_records_total", "Records that were removed or damaged before it got their outcomes.", d.outcomes.Skipped()),
	}
}
