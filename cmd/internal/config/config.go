// Package config reads rig and rule files: YAML in, the typed configuration of
// the step out. It is the only package that knows the form of these files.
//
// All faults of all files are found at once, each with file, line, column and
// what to do. Reading is strict: an unknown key is a fault, a value carries its
// unit, a pressure says what it is measured against, a number is plain decimal.
// A configuration is usable only when there is no fault.
//
// A Bundle is the full text of every file that a configuration was made from,
// the default rules among them. It goes into the records of a run; the same
// bundle gives the same configuration on any machine.
package config

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path"
	"path/filepath"
	"strings"

	"throatwatch/rules/pipeline"
)

const (
	// bundleFormat names the form of a marshalled bundle.
	bundleFormat = "throatwatch config 1"
	// defaultRules is the name of the default rules in a bundle.
	defaultRules = "default rules"
)

// File is a text with its name, relative to the folder of the rig file.
type File struct {
	Name string `json:"name"`
	Text string `json:"text"`
}

// Bundle is all that a configuration was made from: the rig file first, then
// the default rules if they are in use, then the rule files.
type Bundle struct {
	Format string `json:"format"`
	Files  []File `json:"files"`
	Zeros  []Zero `json:"zeros,omitempty"` // that checks have found, for a reduction

	Warnings []Fault `json:"-"` // what is odd in the files and yet usable
}

// Marshal gives the bytes that a config record carries. Their SHA-256 is the
// hash of the configuration.
func (b Bundle) Marshal() []byte {
	b.Format = bundleFormat
	var out bytes.Buffer
	encoder := json.NewEncoder(&out)
	encoder.SetEscapeHTML(false)
	if err := encoder.Encode(b); err != nil {
		panic(err) // strings only: cannot fail
	}
	return out.Bytes()
}

// Load reads a rig file and the rule files that it names. The configuration is
// usable when there is no fault.
func Load(name string) (Bundle, pipeline.Config, []Fault) {
	folder, base := filepath.Split(name)
	b := Bundle{Format: bundleFormat}
	text, err := read(name)
	if err != nil {
		return b, pipeline.Config{}, []Fault{{File: name, Message: err.Error(), Hint: "give the path of a rig file"}}
	}
	b.Files = append(b.Files, File{base, text})
	r := readRig(b.Files[0])
	if r.defaultRules && len(r.faults()) == 0 {
		b.Files = append(b.Files, r.defaults())
	}
	for _, n := range r.ruleFiles {
		file := n.text()
		text, err := read(filepath.Join(folder, filepath.FromSlash(file)))
		if err != nil {
			n.fault(err.Error(), "name a file relative to the folder of the rig file")
			continue
		}
		b.Files = append(b.Files, File{file, text})
	}
	cfg, faults := r.finish(b)
	for _, d := range r.docs {
		b.Warnings = append(b.Warnings, d.warnings...)
	}
	b.Warnings = place(tidy(b.Warnings, b.Files), folder)
	return b, cfg, place(faults, folder)
}

// Parse gives the configuration of a marshalled bundle.
func Parse(bundle []byte) (pipeline.Config, []Fault) {
	b, faults := unmarshal(bundle)
	if len(faults) > 0 {
		return pipeline.Config{}, faults
	}
	return readRig(b.Files[0]).finish(b)
}

// finish adds the rules to what the rig file gave.
func (r *rig) finish(b Bundle) (pipeline.Config, []Fault) {
	files := b.Files[1:]
	if len(files) > 0 && files[0].Name == defaultRules {
		r.readRules(files[0])
		files = files[1:]
	}
	r.take(r.limits)
	for _, f := range files {
		r.readRules(f)
	}
	r.compileRules()
	r.subtract(b.Zeros)
	r.markRecordedOnly()
	sum := sha256.Sum256(b.Marshal())
	r.cfg.Hash = hex.EncodeToString(sum[:])
	faults := tidy(r.faults(), b.Files)
	if len(faults) > 0 {
		return pipeline.Config{}, faults
	}
	return r.cfg, nil
}

// read gives the text of a file; the error says what is wrong in a few words.
func read(name string) (string, error) {
	info, err := os.Stat(name)
	switch {
	case errors.Is(err, os.ErrNotExist):
		return "", fmt.Errorf("there is no file %q", name)
	case err != nil:
		return "", fmt.Errorf("file %q: %w", name, err)
	case !info.Mode().IsRegular():
		return "", fmt.Errorf("%q is no file", name)
	case info.Size() > maxText:
		return "", fmt.Errorf("file %q is larger than 1 MiB", name)
	}
	text, err := os.ReadFile(name)
	if err != nil {
		return "", fmt.Errorf("file %q: %w", name, err)
	}
	return string(text), nil
}

// local tells whether a file name means the same on any machine.
func local(name string) bool {
	return name != "" && !path.IsAbs(name) && path.Clean(name) == name && !strings.ContainsAny(name, `\:`)
}
