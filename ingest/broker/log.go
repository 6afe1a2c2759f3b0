package broker

import (
	"fmt"
	"log/slog"
	"regexp"
)

// logger hands the broker's log to slog. Its notices are start-up banners and
// go out at debug level. Client ids of the daemon are secrets and are cut.
type logger struct {
	log   *slog.Logger
	fatal chan<- string // gets the first reason why the broker cannot start
}

func (l *logger) text(format string, v []any) string { return shortID(fmt.Sprintf(format, v...)) }

// Noticef logs at debug level.
func (l *logger) Noticef(format string, v ...any) { l.log.Debug("broker: " + l.text(format, v)) }

// Warnf logs a warning.
func (l *logger) Warnf(format string, v ...any) { l.log.Warn("broker: " + l.text(format, v)) }

// Errorf logs an error.
func (l *logger) Errorf(format string, v ...any) { l.log.Error("broker: " + l.text(format, v)) }

// Fatalf reports why the broker cannot start; Start returns it.
func (l *logger) Fatalf(format string, v ...any) {
	select {
	case l.fatal <- l.text(format, v):
	default: // the first reason is the one to report
	}
}

// Debugf logs at debug level.
func (l *logger) Debugf(format string, v ...any) { l.log.Debug("broker: " + l.text(format, v)) }

// Tracef logs at debug level.
func (l *logger) Tracef(format string, v ...any) { l.log.Debug("broker: " + l.text(format, v)) }

// shortID cuts every client id of a daemon in text to its first characters.
func shortID(text string) string {
	return regexp.MustCompile(`(tw-[0-9a-f]{4})[0-9a-f]{28}`).ReplaceAllString(text, "$1…")
}
