package influx

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"strconv"
	"strings"
	"time"

	influxhttp "github.com/influxdata/influxdb-client-go/v2/api/http"
)

// mostHalvings bounds the requests that look for the bad lines of one batch: one
// bad line among 5000 takes 26. When it is used up the parts not yet looked into
// are rejected whole.
const mostHalvings = 64

// verdict is what becomes of lines after an answer that is no success.
type verdict uint8

const (
	later    verdict = iota // no answer, too busy, broken: the same again will do
	bad                     // something in the lines
	expired                 // some lines are older than what the bucket keeps; the others are written
	tooLarge                // fewer lines may do
	refused                 // address, token, bucket: a person must do something
)

// answerError is an answer of the server that is no success, or none.
type answerError struct {
	verdict verdict
	after   time.Duration // what the server asks to wait
	err     error
}

func (e *answerError) Error() string { return e.err.Error() }

func (e *answerError) Unwrap() error { return e.err }

// judge gives the verdict on an error of the client.
func judge(err error) *answerError {
	out := &answerError{err: fmt.Errorf("write: %w", err)}
	var e *influxhttp.Error
	if !errors.As(err, &e) || e.StatusCode == 0 {
		return out
	}
	out.err = fmt.Errorf("write: status %d: %s", e.StatusCode, short(e.Error()))
	out.after = min(time.Duration(e.RetryAfter)*time.Second, mostRetryAfter)
	switch c := e.StatusCode; {
	case strings.Contains(e.Message, "beyond retention policy"):
		out.verdict = expired
	case c == http.StatusUnprocessableEntity, c == http.StatusBadRequest && inLines(e):
		out.verdict = bad
	case c == http.StatusRequestEntityTooLarge:
		out.verdict = tooLarge
	case c == http.StatusTooManyRequests, c == http.StatusRequestTimeout, c >= http.StatusInternalServerError:
	default: // other 4xx, and redirections, which are not followed
		out.verdict = refused
	}
	return out
}

// short cuts what a server says, which may be a page.
func short(text string) string {
	const most = 300 // bytes
	text = strings.Join(strings.Fields(text), " ")
	if len(text) > most {
		text = strings.ToValidUTF8(text[:most], "") + " …"
	}
	return text
}

// inLines tells an answer 400 to the lines from one to the request as a whole,
// such as that of a proxy. InfluxDB 2 gives the code "invalid"; 1.8 gives one of
// the texts; 3 gives JSON in which the client finds neither.
func inLines(e *influxhttp.Error) bool {
	if e.Code == "invalid" || e.Message == "" {
		return true
	}
	for _, text := range []string{"partial write", "unable to parse", "field type conflict"} {
		if strings.Contains(e.Message, text) {
			return true
		}
	}
	return false
}

// rejection is a line that the database refuses, and what it said.
type rejection struct{ line, reason string }

// delivery is what became of a batch.
type delivery struct {
	written, expired int
	rejected         []rejection
}

// deliver writes the lines at hand. After an error some may be written.
func (s *Sink) deliver(ctx context.Context) (done delivery, err error) {
	halvings := mostHalvings
	var part func(lines []string) error
	part = func(lines []string) error {
		if len(lines) == 0 {
			return nil
		}
		err := s.api.WriteRecord(ctx, lines...)
		if err == nil {
			done.written += len(lines)
			return nil
		}
		answer := judge(err)
		half := len(lines) / 2
		switch {
		case answer.verdict == expired:
			n := dropped(answer.Error(), len(lines))
			done.written += len(lines) - n
			done.expired += n
			return nil
		case answer.verdict == bad && half > 0 && halvings > 0:
			halvings--
		case answer.verdict == bad:
			for _, line := range lines {
				done.rejected = append(done.rejected, rejection{line, answer.Error()})
			}
			return nil
		case answer.verdict == tooLarge && half > 0:
		default:
			return answer
		}
		if err := part(lines[:half]); err != nil {
			return err
		}
		return part(lines[half:])
	}
	err = part(s.lines)
	return done, err
}

// dropped reads how many of n lines a server says that it dropped; all, when it
// does not say.
func dropped(answer string, n int) int {
	_, text, ok := strings.Cut(answer, "dropped=")
	if !ok {
		return n
	}
	end := strings.IndexFunc(text, func(r rune) bool { return r < '0' || r > '9' })
	if end < 0 {
		end = len(text)
	}
	if d, err := strconv.Atoi(text[:end]); err == nil {
		return min(d, n)
	}
	return n
}
