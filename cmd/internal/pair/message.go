package pair

import (
	"cmp"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"throatwatch/rules/pipeline"
)

const (
	// ShortestSecret is the least length of the shared secret, bytes.
	ShortestSecret = 16
	// mostMessage bounds a message, bytes: a test card is the largest that an action
	// carries.
	mostMessage = 256 << 10
	// fresh is how far the time in a message may be from the receiver's clock: an older
	// one may have been recorded and sent again by somebody else.
	fresh = 60 * time.Second
)

// errForeign is returned for a message that no watch of the pair can have signed.
var errForeign = errors.New("not signed by a watch of the pair")

// signed is a message on its way: says is covered by mac, hex HMAC-SHA256 by the shared
// secret of the topic, a line feed and says as it stands there.
type signed struct {
	MAC  string          `json:"mac"`
	Says json.RawMessage `json:"says"`
}

// beat is what each watch says each second on the topic of the lease. That of the one
// that speaks is retained.
type beat struct {
	Name    string `json:"name"`
	Life    string `json:"life"`    // of its process, random
	Renewed int64  `json:"renewed"` // when it was sent, ns UTC, rising within a life
	Epoch   uint64 `json:"epoch"`   // counts take-overs; of one that is silent, those it knows of
	Speaks  bool   `json:"speaks"`
	Since   int64  `json:"since"`  // it speaks, ns UTC
	Behind  int64  `json:"behind"` // age of the oldest alarm that its webhook has not delivered, ns
	Gone    bool   `json:"gone"`   // it says nothing any more: stopped, or cut off
}

// order is negative where b yields to other: by epoch, then by name. Life only tells
// two apart that were given one name.
func (b *beat) order(other *beat) int {
	return cmp.Or(cmp.Compare(b.Epoch, other.Epoch), cmp.Compare(b.Name, other.Name), cmp.Compare(b.Life, other.Life))
}

// told is an operator's action that was done at another watch.
type told struct {
	Name   string          `json:"name"` // of the watch
	Life   string          `json:"life"`
	Sent   int64           `json:"sent"` // ns UTC
	Action pipeline.Action `json:"action"`
}

// sign gives the message that says v on a topic.
func sign(secret []byte, topic string, v any) ([]byte, error) {
	says, err := json.Marshal(v)
	if err != nil {
		return nil, fmt.Errorf("pair: message on %s: %w", topic, err)
	}
	return json.Marshal(signed{MAC: hex.EncodeToString(mac(secret, topic, says)), Says: says})
}

func mac(secret []byte, topic string, says []byte) []byte {
	h := hmac.New(sha256.New, secret)
	h.Write([]byte(topic)) // a hash takes everything
	h.Write([]byte{'\n'})
	h.Write(says)
	return h.Sum(nil)
}

// open reads a message on a topic into v. The error wraps errForeign where the
// signature is not that of the secret.
func open(secret []byte, topic string, payload []byte, v any) error {
	if len(payload) > mostMessage {
		return fmt.Errorf("%d bytes, more than %d", len(payload), mostMessage)
	}
	var s signed
	if err := json.Unmarshal(payload, &s); err != nil {
		return fmt.Errorf("%w: %w", errForeign, err)
	}
	got, err := hex.DecodeString(s.MAC)
	if err != nil || !hmac.Equal(got, mac(secret, topic, s.Says)) {
		return errForeign
	}
	return json.Unmarshal(s.Says, v)
}

// isFresh tells that a time in a message is about now.
func isFresh(sent int64, now time.Time) bool {
	d := now.Sub(time.Unix(0, sent))
	return d > -fresh && d < fresh
}
