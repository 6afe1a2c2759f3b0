package influx

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"strings"
	"time"

	influxdb2 "github.com/influxdata/influxdb-client-go/v2"
)

// checkMeasurement gets one point at each Check.
const checkMeasurement = "check"

// longestAnswer is what is read of an answer to a question, bytes.
const longestAnswer = 1 << 16

// Check writes one point of measurement "check" for a rig, at the time given, and
// asks for it. err tells why it could not be written, which is what a watch needs;
// unread why it was not found again, which takes a right to read that a watch does
// without.
func Check(ctx context.Context, t Target, rig string, at time.Time) (unread, err error) {
	s, err := New(Config{Target: t, Rig: rig})
	if err != nil {
		return nil, err
	}
	defer s.Close()
	row := Row{Measurement: checkMeasurement, T: at.UnixNano(), Fields: []Field{Bool("written", true)}}
	s.lines = []string{row.line(rig)}
	done, err := s.deliver(ctx)
	switch {
	case err != nil:
		return nil, fmt.Errorf("influx: write to %s: %w", t, err)
	case len(done.rejected) > 0:
		return nil, fmt.Errorf("influx: write to %s: %s", t, done.rejected[0].reason)
	case done.expired > 0:
		return nil, fmt.Errorf("influx: write to %s: a point of now is older than what it keeps: compare the clocks", t)
	}
	if t.Org == "" {
		return s.ask18(ctx, rig, at), nil
	}
	return s.ask2(ctx, rig, at), nil
}

// errNotFound is what an answer without the point means.
var errNotFound = errors.New("what was written was not found again")

// ask18 looks for the point by the query language of InfluxDB 1.8.
func (s *Sink) ask18(ctx context.Context, rig string, at time.Time) error {
	t := s.cfg.Target
	db, rp, _ := strings.Cut(t.Bucket, "/")
	form := url.Values{"db": {db}, "rp": {rp}, "q": {fmt.Sprintf(
		`SELECT "written" FROM %q WHERE "rig" = '%s' AND time = %d`, checkMeasurement, strings.ReplaceAll(rig, "'", `\'`), at.UnixNano())}}
	req, err := http.NewRequestWithContext(ctx, http.MethodPost, strings.TrimSuffix(t.URL, "/")+"/query", strings.NewReader(form.Encode()))
	if err != nil {
		return fmt.Errorf("influx: query: %w", err)
	}
	req.Header.Set("Content-Type", "application/x-www-form-urlencoded")
	if t.Token != "" {
		req.Header.Set("Authorization", "Token "+t.Token)
	}
	res, err := s.http.Do(req)
	if err != nil {
		return fmt.Errorf("influx: query: %w", err)
	}
	defer res.Body.Close() //nolint:errcheck // it is only read
	text, err := io.ReadAll(io.LimitReader(res.Body, longestAnswer))
	switch {
	case err != nil:
		return fmt.Errorf("influx: query: %w", err)
	case res.StatusCode != http.StatusOK:
		return fmt.Errorf("influx: query: status %d: %s", res.StatusCode, short(string(text)))
	case !strings.Contains(string(text), `"written"`):
		return errNotFound
	}
	return nil
}

// ask2 looks for the point by the query language of InfluxDB 2.
func (s *Sink) ask2(ctx context.Context, rig string, at time.Time) error {
	t := s.cfg.Target
	client := influxdb2.NewClientWithOptions(t.URL, t.Token, influxdb2.DefaultOptions().SetHTTPClient(s.http))
	found, err := client.QueryAPI(t.Org).Query(ctx, fmt.Sprintf(
		`from(bucket: %q) |> range(start: %s, stop: %s) |> filter(fn: (r) => r._measurement == %q and r.rig == %q)`, t.Bucket,
		at.UTC().Format(time.RFC3339Nano), at.Add(time.Second).UTC().Format(time.RFC3339Nano), checkMeasurement, rig))
	if err != nil {
		return fmt.Errorf("influx: query: %w", err)
	}
	defer found.Close() //nolint:errcheck // it is only read
	if !found.Next() {
		return errors.Join(errNotFound, found.Err())
	}
	return nil
}
