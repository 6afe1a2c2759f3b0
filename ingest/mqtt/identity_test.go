package mqtt

import (
	"os"
	"path/filepath"
	"testing"
)

// A client id file that is damaged, or that somebody has edited, is refused or gives
// an id of the right form; it is never replaced.
func FuzzIdentity(f *testing.F) {
	f.Add([]byte(`{"client":"tw-0123456789abcdef0123456789abcdef","filters":["rigs/x/senml",""]}`))
	f.Add([]byte(`{"client":"tw-short"}`))
	f.Add([]byte(`{"client":`))
	f.Fuzz(func(t *testing.T, text []byte) {
		dir := t.TempDir()
		path := filepath.Join(dir, identityFile)
		if err := os.WriteFile(path, text, 0o600); err != nil {
			t.Fatal(err)
		}
		id, err := openIdentity(dir)
		if err == nil && len(id.sessionID(0)) != len("tw-0123456789abcdef0123456789abcdef-0") {
			t.Errorf("id %q", id.Client)
		}
		if left, readErr := os.ReadFile(path); readErr != nil || string(left) != string(text) {
			t.Errorf("the file became %q: %v", left, readErr)
		}
	})
}
