package config

import (
	"encoding/json"
	"fmt"
	"slices"
	"strings"
	"time"

	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/rules/pipeline"
)

// maxSwaps bounds the sensors that a rig file lets take the place of others.
const maxSwaps = 200

// readSensor reads what is on file of a sensor. Days end at the facility.
func (r *rig) readSensor(n node) (s calib.Record) {
	if !n.is() {
		return s
	}
	f := n.fields()
	s.Serial = f.need("serial", "the serial number of the sensor").label("")
	s.Certificate = f.get("certificate").label("")
	s.Calibrated = f.get("calibrated").date()
	due := f.get("due")
	s.Due = due.date()
	s.Expires = r.endOf(s.Due)
	if s.Due != "" && s.Due <= s.Calibrated {
		due.fault(fmt.Sprintf("it is due on %s, and was calibrated on %s", s.Due, s.Calibrated), "correct one of them")
	}
	if waiver := f.get("waiver"); waiver.is() {
		g := waiver.fields()
		s.Waiver.Who = g.need("who", "name who answers for the use of the sensor").label("")
		s.Waiver.Why = g.need("why", "say why it may be used").label("")
		until := g.get("until")
		s.Waiver.Until = until.date()
		s.Waiver.Ends = r.endOf(s.Waiver.Until)
		g.done()
		switch {
		case s.Due == "":
			waiver.fault("a waiver without a due date", "state due: the waiver counts from then on")
		case s.Waiver.Until != "" && s.Waiver.Until <= s.Due:
			until.fault("the waiver ends before the calibration does", "state the last day of the waiver")
		}
	}
	f.done()
	return s
}

// endOf gives the end of a day at the facility, ns UTC; 0 for none.
func (r *rig) endOf(day string) int64 {
	if day == "" {
		return 0
	}
	t, err := time.ParseInLocation(time.DateOnly, day, r.cfg.Rig.Zone())
	if err != nil {
		return 0 // told already
	}
	return t.AddDate(0, 0, 1).UnixNano()
}

// Expired tells of the calibrations that are out of date at t, ns UTC, in a rig file of this
// name: the configuration is usable all the same.
func Expired(name string, cfg *pipeline.Config, t int64) (warnings []Fault) {
	for _, i := range cfg.OnFile() {
		ch := &cfg.Compute.Channels[i]
		switch r := ch.RecordAt(t); r.State(t) {
		case calib.Expired:
			warnings = append(warnings, Fault{
				File: name, Path: "channels." + ch.ID + ".sensor", Message: fmt.Sprintf("the calibration of sensor %s was due on %s", r.Serial, r.Due),
				Hint: "calibrate it, or name in waiver: {who: …, why: …} who answers for its use",
			})
		case calib.Waived:
			warnings = append(warnings, Fault{
				File: name, Path: "channels." + ch.ID + ".sensor", Message: fmt.Sprintf("the calibration of sensor %s was due on %s, waived by %s", r.Serial, r.Due, r.Waiver.Who),
				Hint: "calibrate it; the waiver says: " + r.Waiver.Why,
			})
		case calib.NotOnFile, calib.InDate:
		}
	}
	return warnings
}

// readSwaps reads the sensors that took the place of others, from when on and how they are
// calibrated.
func (r *rig) readSwaps(n node) {
	items := n.items()
	if len(items) > maxSwaps {
		n.fault(fmt.Sprintf("%d swaps are too many", len(items)), fmt.Sprintf("%d at most", maxSwaps))
		items = items[:maxSwaps]
	}
	for _, item := range items {
		f := item.fields()
		name := f.need("channel", "the channel that the sensor is on")
		at := f.need("valid_from", "the time of its first sample, as 2026-03-02T09:41:00Z")
		sensor, calibration, uncertainty := f.need("sensor", "write sensor: {serial: …}"), f.get("calibration"), f.get("uncertainty")
		f.done()
		i := r.index(name.text())
		if i < 0 {
			if name.is() {
				name.fault(fmt.Sprintf("there is no channel %q", name.text()), nearest(name.text(), r.ids()))
			}
			continue
		}
		ch := &r.cfg.Compute.Channels[i]
		spec := ch.Spec
		if k := len(ch.Swaps); k > 0 { // what is not stated is as of the sensor before
			spec.Polynomial, spec.Uncertainty = ch.Swaps[k-1].Polynomial, ch.Swaps[k-1].Uncertainty
		}
		if calibration.is() {
			spec.Polynomial, spec.Raw = nil, spec.Unit
			readCalibration(calibration, &spec)
			switch {
			case spec.Raw != ch.Raw:
				calibration.fault(fmt.Sprintf("the raw unit is %q, and that of the channel %q", spec.Raw.Name, ch.Raw.Name), "a sensor with another raw unit is another channel")
			case r.channels[i].sea:
				calibration.fault("the channel is reduced to sea level", "correct the calibration of the channel instead")
			}
		}
		if uncertainty.is() {
			spec.Uncertainty = calib.Uncertainty{}
			readUncertainty(uncertainty, spec.Unit.Dimension, &spec.Uncertainty)
		}
		swap := compute.Swap{From: at.instant(), Polynomial: spec.Polynomial, Uncertainty: spec.Uncertainty, Record: r.readSensor(sensor)}
		if k := len(ch.Swaps); k > 0 && swap.From <= ch.Swaps[k-1].From && swap.From != 0 {
			at.fault("the swap before it on this channel is not earlier", "order the swaps of a channel by their time")
		}
		ch.Swaps = append(ch.Swaps, swap)
	}
}

// instant reads a time and gives ns UTC; 0 without a value or with a faulty one.
func (n node) instant() int64 {
	if !n.is() {
		return 0
	}
	t, err := time.Parse(time.RFC3339Nano, n.text())
	if err != nil || t.UnixNano() <= 0 || t.Year() > 2200 {
		n.fault(fmt.Sprintf("%q is no time", n.text()), "write it with its zone, as 2026-03-02T09:41:00Z")
		return 0
	}
	return t.UnixNano()
}

// Swapped is a sensor that took the place of another, as somebody entered it.
type Swapped struct {
	Channel     string
	Serial      string
	ValidFrom   int64  // ns UTC
	Calibration string // keys calibration, uncertainty and sensor, as in a rig file
}

// WithSwaps gives a bundle whose rig file has the swaps besides, by rising ValidFrom of a
// channel. The faults tell what is wrong with their texts.
func WithSwaps(bundle []byte, swaps []Swapped) ([]byte, []Fault) {
	b, faults := unmarshal(bundle)
	if len(faults) > 0 {
		return nil, faults
	}
	if top := open(b.Files[0]); top.is() && top.fields().has("swaps") {
		return nil, []Fault{{File: b.Files[0].Name, Path: "swaps", Message: "the rig file states swaps itself", Hint: "add those that were entered to them"}}
	}
	var text strings.Builder
	text.WriteString(strings.TrimRight(b.Files[0].Text, " \t\r\n") + "\n\nswaps:                          # entered during the run\n")
	for _, s := range swaps {
		own := open(File{Name: "swap of " + s.Channel, Text: s.Calibration})
		f := own.fields()
		calibration, uncertainty, sensor := f.get("calibration"), f.get("uncertainty"), f.get("sensor")
		f.done()
		if !own.is() || !calibration.is() && !uncertainty.is() && !sensor.is() {
			own.fault("the calibration says nothing", "give calibration:, uncertainty: or sensor:, as in the rig file")
		}
		if sensor.is() {
			if serial := sensor.fields().get("serial"); serial.text() != s.Serial {
				serial.fault(fmt.Sprintf("the serial number is %q, and the swap says %q", serial.text(), s.Serial), "correct one of them")
			}
		}
		if len(own.doc.faults) > 0 {
			return nil, own.doc.faults
		}
		fmt.Fprintf(&text, "  - channel: %s\n    valid_from: %s\n", quote(s.Channel), quote(time.Unix(0, s.ValidFrom).UTC().Format(time.RFC3339Nano)))
		if !sensor.is() {
			fmt.Fprintf(&text, "    sensor: {serial: %s}\n", quote(s.Serial))
		}
		for line := range strings.Lines(strings.ReplaceAll(s.Calibration, "\r\n", "\n")) {
			text.WriteString("    " + strings.TrimRight(line, "\n") + "\n")
		}
	}
	b.Files = slices.Clone(b.Files)
	b.Files[0].Text = text.String()
	out := b.Marshal()
	_, faults = Parse(out)
	return out, faults
}

// unmarshal gives the bundle of its bytes.
func unmarshal(bundle []byte) (b Bundle, faults []Fault) {
	if err := json.Unmarshal(bundle, &b); err != nil || b.Format != bundleFormat || len(b.Files) == 0 {
		return b, []Fault{{
			File: "bundle", Message: "no bundle of rig and rule files", Hint: "it was written by another program or is damaged",
		}}
	}
	return b, nil
}
