package pipeline

import (
	"fmt"
	"slices"
	"strings"

	"throatwatch/monitor/compute"
	"throatwatch/rules"
)

// readmit takes a probe back that is excluded, from the next scan on. It is for an engineer and needs a reason; it is refused while the failure of
// the probe is proven.
func (m *Machine) readmit(s *State, a *Action) error {
	at := slices.IndexFunc(m.prog.cfg.Compute.Channels, func(c compute.Channel) bool { return c.ID == a.Channel })
	switch {
	case a.Role != "engineer" && a.Role != "facility":
		return fmt.Errorf("%w: a probe is taken back by an engineer", rules.ErrRefused)
	case strings.TrimSpace(a.Reason) == "":
		return fmt.Errorf("%w: taking a probe back needs a reason", rules.ErrRefused)
	case at < 0:
		return fmt.Errorf("channel %q: %w", a.Channel, ErrNoChannel)
	}
	if err := m.prog.compute.Readmit(&s.Compute, at); err != nil {
		return fmt.Errorf("%w: %w", rules.ErrRefused, err)
	}
	m.log(s, a, Entry{Channel: a.Channel})
	return nil
}
