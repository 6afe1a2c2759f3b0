package config

import (
	"path/filepath"
	"reflect"
	"testing"

	"throatwatch/rules/pipeline"
)

const rigs = "../../../testdata/rigs/"

// load gives the configuration of a rig file that must have no fault.
func load(t *testing.T, name string) (Bundle, pipeline.Config) {
	t.Helper()
	b, cfg, faults := Load(filepath.FromSlash(name))
	for _, f := range faults {
		t.Error(f)
	}
	if len(faults) > 0 {
		t.FailNow()
	}
	return b, cfg
}

// A run is replayed from its bundle, on another machine, without the files.
func TestBundleGivesTheSameConfig(t *testing.T) {
	for _, name := range []string{"example.yaml", "minimal.yaml"} {
		b, cfg := load(t, rigs+name)
		again, faults := Parse(b.Marshal())
		if len(faults) > 0 {
			t.Fatalf("%s: faults of the bundle: %v", name, faults)
		}
		if !reflect.DeepEqual(cfg, again) {
			t.Errorf("%s: the bundle gives another configuration", name)
		}
		if len(cfg.Hash) != 64 {
			t.Errorf("%s: hash %q is no SHA-256", name, cfg.Hash)
		}
	}
}
