package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/spf13/pflag"
)

// watchTakes tells what is wrong with arguments of a watch.
func watchTakes(args []string) error {
	var o watchOptions
	fs := pflag.NewFlagSet("watch", pflag.ContinueOnError)
	o.flags(fs)
	if err := fs.Parse(args); err != nil {
		return err
	}
	return o.check(fs)
}

// TestContainerfile reads the container file as a builder would (Dockerfile
// reference, docs.docker.com, from memory), without building it: known instructions,
// stages that are named before they are used, files that are there, a static binary,
// a user that is not root, and arguments that a watch takes.
func TestContainerfile(t *testing.T) {
	t.Parallel()
	const root = "../.."
	text, err := os.ReadFile(root + "/deploy/Containerfile")
	if err != nil {
		t.Fatal(err)
	}
	joined := regexp.MustCompile(`(?m)^#.*\n|\\\n\s*`).ReplaceAllString(string(text), "")
	stages, last := []string{}, map[string]string{}
	for line := range strings.Lines(joined) {
		line = strings.TrimSpace(line)
		if line == "" {
			continue
		}
		word, rest, _ := strings.Cut(line, " ")
		cells := strings.Fields(rest)
		switch word {
		case "FROM":
			if len(cells) == 3 && cells[1] == "AS" {
				stages = append(stages, cells[2])
			}
			last = map[string]string{}
		case "COPY":
			flags := 0
			from := ""
			for ; strings.HasPrefix(cells[flags], "--"); flags++ {
				if name, ok := strings.CutPrefix(cells[flags], "--from="); ok {
					from = name
				}
			}
			if from != "" {
				if !slices.Contains(stages, from) {
					t.Errorf("%s: there is no stage %q before", line, from)
				}
				break
			}
			for _, file := range cells[flags : len(cells)-1] {
				if _, err := os.Stat(filepath.Join(root, file)); err != nil {
					t.Errorf("%s: %v", line, err)
				}
			}
		case "RUN":
			if strings.Contains(rest, "go build") && !strings.HasPrefix(rest, "CGO_ENABLED=0 ") {
				t.Errorf("%s: not static, and there is no library in the image", line)
			}
		case "WORKDIR", "VOLUME", "EXPOSE", "STOPSIGNAL", "USER", "ENTRYPOINT", "CMD":
		default:
			t.Errorf("%s: unknown instruction", line)
		}
		last[word] = rest
	}
	var entry, command []string
	for word, into := range map[string]*[]string{"ENTRYPOINT": &entry, "CMD": &command} {
		if err := json.Unmarshal([]byte(last[word]), into); err != nil {
			t.Errorf("%s %s: %v", word, last[word], err)
		}
	}
	if !slices.Equal(entry, []string{"/throatwatch", "watch"}) {
		t.Errorf("the image starts %q", entry)
	}
	if err := watchTakes(command); err != nil {
		t.Errorf("CMD %q: %v", command, err)
	}
	if last["FROM"] != "scratch" || strings.HasPrefix(last["USER"], "0") || last["USER"] == "" {
		t.Errorf("the image is from %q and runs as %q", last["FROM"], last["USER"])
	}
}

// TestUnit holds what the service unit starts, and the flags that its configuration
// proposes, against the flags that there are. deploy/check-package lets systemd's
// own tools look at the rest.
func TestUnit(t *testing.T) {
	t.Parallel()
	unit, err := os.ReadFile("../../deploy/throatwatch.service")
	if err != nil {
		t.Fatal(err)
	}
	defaults, err := os.ReadFile("../../deploy/throatwatch.default")
	if err != nil {
		t.Fatal(err)
	}
	start := regexp.MustCompile(`(?m)^ExecStart=/usr/bin/throatwatch watch (.*)$`).FindSubmatch(unit)
	flags := regexp.MustCompile(`(?m)^#?FLAGS="(.*)"$`).FindAllSubmatch(defaults, -1)
	if start == nil || len(flags) != 2 {
		t.Fatalf("ExecStart %q, FLAGS %q", start, flags)
	}
	for _, f := range flags {
		line := strings.NewReplacer("${RIG}", "rig.yaml", "$FLAGS", string(f[1])).Replace(string(start[1]))
		if err := watchTakes(strings.Fields(line)); err != nil {
			t.Errorf("watch %s: %v", line, err)
		}
	}
	for _, want := range []string{"Type=notify", "WatchdogSec=10", "Restart=always", "NoNewPrivileges=yes", "ProtectSystem=strict"} {
		if !strings.Contains(string(unit), "\n"+want+"\n") {
			t.Errorf("the unit has no %s", want)
		}
	}
}
