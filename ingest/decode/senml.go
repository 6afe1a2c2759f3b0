package decode

import (
	"math"

	"throatwatch/ingest"
)

// label is a SenML label, numbered as CBOR numbers it [RFC 8428 table 4].
type label int8

const (
	labelBaseSum     label = -6
	labelBaseValue   label = -5
	labelBaseUnit    label = -4
	labelBaseTime    label = -3
	labelBaseName    label = -2
	labelBaseVersion label = -1
	labelName        label = 0
	labelUnit        label = 1
	labelValue       label = 2
	labelString      label = 3
	labelBool        label = 4
	labelSum         label = 5
	labelTime        label = 6
	labelUpdate      label = 7
	labelData        label = 8
	labelUnknown     label = 9
	labelMust        label = 10 // unknown, and ends in "_" [RFC 8428 4.4]
)

// textLabel gives the label for its JSON text.
func textLabel(b []byte) label {
	switch string(b) {
	case "bn":
		return labelBaseName
	case "bt":
		return labelBaseTime
	case "bu":
		return labelBaseUnit
	case "bv":
		return labelBaseValue
	case "bs":
		return labelBaseSum
	case "bver":
		return labelBaseVersion
	case "n":
		return labelName
	case "u":
		return labelUnit
	case "v":
		return labelValue
	case "vs":
		return labelString
	case "vb":
		return labelBool
	case "vd":
		return labelData
	case "s":
		return labelSum
	case "t":
		return labelTime
	case "ut":
		return labelUpdate
	}
	if len(b) > 0 && b[len(b)-1] == '_' {
		return labelMust
	}
	return labelUnknown
}

// senmlVersion is the newest version of SenML that this package knows.
const senmlVersion = 10

// record is one SenML record as read, before its base fields are applied.
type record struct {
	set                uint32 // labels that are present, bit = label + 6
	bn, bu, n, u       []byte
	bver, bt, bv, v, t float64

	reason ingest.Reason // why it gives no sample, with the place and the text
	at     int
	what   string
}

// base holds the base fields in force [RFC 8428 4.1].
type base struct {
	bn, bu []byte
	bt, bv float64
	t      int64 // what bt comes to, and whether it is the sender's own
	own    bool
}

// baseLabels are the bits of those labels in record.set.
const baseLabels = 1<<(labelName-labelBaseSum) - 1

func (r *record) mark(l label)     { r.set |= 1 << (l - labelBaseSum) }
func (r *record) has(l label) bool { return r.set&(1<<(l-labelBaseSum)) != 0 }

// text gives the field that holds a text label, nil for other labels.
func (r *record) text(l label) *[]byte {
	//exhaustive:ignore
	switch l {
	case labelBaseName:
		return &r.bn
	case labelBaseUnit:
		return &r.bu
	case labelName:
		return &r.n
	case labelUnit:
		return &r.u
	default:
		return nil
	}
}

// number gives the field that holds a numeric label, nil for other labels.
// Sums and the update time are not used, so they have none.
func (r *record) number(l label) *float64 {
	//exhaustive:ignore
	switch l {
	case labelBaseVersion:
		return &r.bver
	case labelBaseTime:
		return &r.bt
	case labelBaseValue:
		return &r.bv
	case labelValue:
		return &r.v
	case labelTime:
		return &r.t
	default:
		return nil
	}
}

// wrong takes note that a field cannot be used. A base field concerns all that
// follow, so the pack is refused; another field costs its record only.
func (d *Decoder) wrong(r *record, l label, reason ingest.Reason, i, at int) {
	if reason == ingest.ReasonNotNumber && l != labelValue {
		reason = ingest.ReasonSyntax // only a value may be something else
	}
	switch {
	case l == labelMust:
		d.refuse(ingest.ReasonMustUnderstand, i, at, `a label ends in "_" and is not known: the pack may mean something else`, nil)
	case l < labelName:
		d.refuse(reason, i, at, "a base field has the wrong type or is not finite", nil)
	case r.reason == ingest.ReasonNone:
		r.reason, r.at, r.what = reason, at, "a field has the wrong type or is not finite"
	}
}

// resolve applies the base fields [RFC 8428 4.6] to record i, which starts at
// byte at, and adds its sample. Sums are ignored: a record with a sum but no value
// is no fault, nor is one that has base fields only.
func (d *Decoder) resolve(r *record, i, at int) {
	base := &d.base
	if r.set&baseLabels != 0 && !d.rebase(r, i, at) {
		return
	}

	switch {
	case r.reason != ingest.ReasonNone:
		d.note(r.reason, i, r.at, r.what, nil)
		return
	case r.has(labelValue):
	case r.has(labelString), r.has(labelBool), r.has(labelData):
		d.note(ingest.ReasonNotNumber, i, at, "text, boolean or data value", nil)
		return
	case r.has(labelSum):
		return
	case r.has(labelName):
		d.note(ingest.ReasonSyntax, i, at, "record has a name but no value", nil)
		return
	default:
		return
	}

	if len(base.bn)+len(r.n) > MaxName {
		d.note(ingest.ReasonSyntax, i, at, "name is too long", nil)
		return
	}
	name := r.n
	if len(base.bn) > 0 {
		name = d.keep(base.bn, r.n)
	}
	if !validName(name) {
		d.note(ingest.ReasonSyntax, i, at, `name is not made of letters, digits and "-:./_" after a letter or digit`, nil)
		return
	}
	v := base.bv + r.v
	if math.IsInf(v, 0) {
		d.note(ingest.ReasonNotFinite, i, at, "sum of base value and value is not finite", nil)
		return
	}
	unit := r.u
	if !r.has(labelUnit) {
		unit = base.bu
	}
	t, own := base.t, base.own
	if r.has(labelTime) {
		t, own = d.senmlTime(base.bt + r.t)
	}
	d.add(name, unit, t, own, v)
}

// rebase takes the base fields of record i, which starts at byte at, into force; false
// when the pack is refused.
func (d *Decoder) rebase(r *record, i, at int) bool {
	base := &d.base
	if r.has(labelBaseVersion) && r.bver > senmlVersion {
		d.refuse(ingest.ReasonMustUnderstand, i, at, "bver is over 10, a SenML version that is not known", nil)
		return false
	}
	if r.has(labelBaseName) {
		base.bn = r.bn
	}
	if r.has(labelBaseUnit) {
		base.bu = r.bu
	}
	if r.has(labelBaseTime) {
		base.bt = r.bt
		base.t, base.own = d.senmlTime(r.bt)
	}
	if r.has(labelBaseValue) {
		base.bv = r.bv
	}
	return true
}

// senmlTime resolves a SenML time: below 2^28 s it is relative to now
// [RFC 8428 4.5.3]. The second result is false for a relative time.
func (d *Decoder) senmlTime(seconds float64) (int64, bool) {
	t := nanos(seconds)
	if seconds >= 1<<28 {
		return t, true
	}
	if sum := d.host + t; sum != ingest.NoTime && (t < 0) == (sum < d.host) {
		return sum, false
	}
	return nanos(math.Inf(-1)), false // further back than int64 reaches
}

// validName tells whether b is a SenML name [RFC 8428 4.5.1].
func validName(b []byte) bool {
	for i, c := range b {
		switch {
		case c|0x20 >= 'a' && c|0x20 <= 'z', c >= '0' && c <= '9':
		case i > 0 && (c == '-' || c == ':' || c == '.' || c == '/' || c == '_'):
		default:
			return false
		}
	}
	return len(b) > 0
}
