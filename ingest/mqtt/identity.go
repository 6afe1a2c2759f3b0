package mqtt

import (
	"crypto/rand"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"sync"
)

// identityFile is the name of the file in the data directory.
const identityFile = "mqtt-client.json"

// identity is who the client is to the broker. Whoever knows the id can take
// the sessions over and empty them, so it is random, private to the file's owner
// and never logged whole.
type identity struct {
	path string

	mu     sync.Mutex // protects the fields below and the file
	Client string     `json:"client"` // "tw-" and 128 random bits in hex
	// Filters remembers which filter each numbered session is subscribed to. A
	// session whose filter is no longer wanted is ended at the broker, which
	// would else keep messages for it for ever; its number is then free ("").
	Filters []string `json:"filters"`
}

// openIdentity reads the identity in dir or creates it.
func openIdentity(dir string) (*identity, error) {
	id := &identity{path: filepath.Join(dir, identityFile)}
	text, err := os.ReadFile(id.path)
	if errors.Is(err, fs.ErrNotExist) {
		var bits [16]byte
		rand.Read(bits[:]) // never fails
		id.Client = "tw-" + hex.EncodeToString(bits[:])
		return id, id.save()
	}
	if err != nil {
		return nil, fmt.Errorf("mqtt: client id: %w", err)
	}
	err = json.Unmarshal(text, id)
	if err == nil && !regexp.MustCompile(`^tw-[0-9a-f]{32}$`).MatchString(id.Client) {
		err = errors.New("no client id")
	}
	if err != nil {
		return nil, fmt.Errorf("mqtt: client id: %s is damaged: %w (restore it from a copy; deleting it makes a new id and loses what the broker holds for the old one)", id.path, err)
	}
	return id, nil
}

// save replaces the file in one step, so that a crash leaves the old or the new.
func (id *identity) save() error {
	text, err := json.MarshalIndent(id, "", "  ")
	if err != nil {
		return fmt.Errorf("mqtt: client id: %w", err)
	}
	if err := replaceFile(id.path, append(text, '\n')); err != nil {
		return fmt.Errorf("mqtt: client id: %w", err)
	}
	return nil
}

func replaceFile(path string, text []byte) error {
	f, err := os.CreateTemp(filepath.Dir(path), identityFile+".*") // mode 0600
	if err != nil {
		return err
	}
	_, err = f.Write(text)
	err = errors.Join(err, f.Sync(), f.Close())
	if err == nil {
		err = os.Rename(f.Name(), path)
	}
	if err != nil {
		return errors.Join(err, os.Remove(f.Name()))
	}
	dir, err := os.Open(filepath.Dir(path))
	if err != nil {
		return err
	}
	return errors.Join(dir.Sync(), dir.Close())
}

// assign gives each filter the number of its session, the same as before where
// it had one.
func (id *identity) assign(filters []string) ([]int, error) {
	id.mu.Lock()
	defer id.mu.Unlock()
	slots := make([]int, len(filters))
	changed := false
	for i, filter := range filters {
		slot := slices.Index(id.Filters, filter)
		if slot < 0 {
			changed = true
			if slot = slices.Index(id.Filters, ""); slot < 0 {
				slot = len(id.Filters)
				id.Filters = append(id.Filters, "")
			}
			id.Filters[slot] = filter
		}
		slots[i] = slot
	}
	if !changed {
		return slots, nil
	}
	return slots, id.save()
}

// unwanted gives the numbers of sessions whose filter is not among filters.
func (id *identity) unwanted(filters []string) []int {
	id.mu.Lock()
	defer id.mu.Unlock()
	var slots []int
	for slot, filter := range id.Filters {
		if filter != "" && !slices.Contains(filters, filter) {
			slots = append(slots, slot)
		}
	}
	return slots
}

// free makes a number available after its session has been ended.
func (id *identity) free(slot int) error {
	id.mu.Lock()
	defer id.mu.Unlock()
	id.Filters[slot] = ""
	return id.save()
}

func (id *identity) sessionID(slot int) string { return fmt.Sprintf("%s-%d", id.Client, slot) }

// public names the client where others can read it, without giving the id away.
func (id *identity) public() string {
	sum := sha256.Sum256([]byte(id.Client))
	return hex.EncodeToString(sum[:6])
}
