package mqtt

import (
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"
)

// probePrefix begins the topics of probe messages.
const probePrefix = "throatwatch/probe/"

// maxTopic is the longest topic in bytes [MQTT-1.5.3].
const maxTopic = 65535

// CheckTopic returns an error, which wraps ErrConfig, for a topic to which a
// message cannot be published everywhere. White space and control characters are
// legal in MQTT but make some brokers disconnect the publisher.
func CheckTopic(topic string) error {
	if strings.ContainsAny(topic, "+#") {
		return fmt.Errorf("%w: topic %q holds a wildcard", ErrConfig, topic)
	}
	return checkText("topic", topic)
}

// CheckFilter returns an error, which wraps ErrConfig, for a topic filter that
// is malformed [MQTT-4.7.1], holds white space or control characters, or begins
// with "$": shared subscriptions would split a channel's samples.
func CheckFilter(filter string) error {
	if err := checkText("topic filter", filter); err != nil {
		return err
	}
	levels := strings.Split(filter, "/")
	for i, level := range levels {
		switch {
		case strings.Contains(level, "#") && (level != "#" || i != len(levels)-1):
			return fmt.Errorf("%w: topic filter %q: \"#\" must be the whole last level", ErrConfig, filter)
		case strings.Contains(level, "+") && level != "+":
			return fmt.Errorf("%w: topic filter %q: \"+\" must be a whole level", ErrConfig, filter)
		}
	}
	return nil
}

func checkText(what, s string) error {
	switch {
	case s == "":
		return fmt.Errorf("%w: %s is empty", ErrConfig, what)
	case len(s) > maxTopic:
		return fmt.Errorf("%w: %s of %d bytes is longer than %d", ErrConfig, what, len(s), maxTopic)
	case !utf8.ValidString(s):
		return fmt.Errorf("%w: %s %q is not UTF-8", ErrConfig, what, s)
	case s[0] == '$':
		return fmt.Errorf("%w: %s %q begins with \"$\", which brokers keep for themselves", ErrConfig, what, s)
	}
	for _, r := range s {
		if unicode.IsSpace(r) || unicode.IsControl(r) || r == utf8.RuneError || r == '\uFEFF' {
			return fmt.Errorf("%w: %s %q holds white space or a control character: rename it, some brokers refuse it", ErrConfig, what, s)
		}
	}
	return nil
}

// CheckFilters returns an error, which wraps ErrConfig, when a filter is bad,
// when two of them overlap (each message that both match would come twice), or
// when one takes in the client's own probe messages.
func CheckFilters(filters []string) error {
	if len(filters) == 0 {
		return fmt.Errorf("%w: no topic filter", ErrConfig)
	}
	for i, filter := range filters {
		if err := CheckFilter(filter); err != nil {
			return err
		}
		for _, other := range filters[:i] {
			if overlap(filter, other) {
				return fmt.Errorf("%w: topic filters %q and %q overlap: a message that matches both would come twice", ErrConfig, other, filter)
			}
		}
		if overlap(filter, probePrefix+"+/+") {
			return fmt.Errorf("%w: topic filter %q takes in the probe messages below %q: name the rig's topics instead", ErrConfig, filter, probePrefix)
		}
	}
	return nil
}

// overlap reports whether some topic matches both filters.
func overlap(a, b string) bool {
	la, lb := strings.Split(a, "/"), strings.Split(b, "/")
	for i := 0; ; i++ {
		switch {
		// "x/#" matches "x" too [MQTT-4.7.1-2].
		case i < len(la) && la[i] == "#", i < len(lb) && lb[i] == "#":
			return true
		case i >= len(la) || i >= len(lb):
			return len(la) == len(lb)
		case la[i] != lb[i] && la[i] != "+" && lb[i] != "+":
			return false
		}
	}
}
