package main

import (
	"context"
	"crypto/rand"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"os"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/config"
	"throatwatch/dashboard"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// parseCard reads the text of a test card for the server.
func parseCard(text string, cfg *pipeline.Config) (card.Card, string, []dashboard.Fault) {
	c, faults := config.ParseCard("card", text, cfg)
	return c, config.CardHash(text), shownFaults(faults)
}

// beginCard loads the test card of the flags, unless it is in force already: a restart in
// the middle of a card goes on with it.
func (w *watcher) beginCard(ctx context.Context) error {
	if w.opt.card == "" {
		return nil
	}
	c, text, faults := config.LoadCard(w.opt.card, &w.cfg)
	if err := faultsOf("the test card has faults", faults); err != nil {
		return err
	}
	hash, inForce := config.CardHash(text), ""
	if err := w.loop.Ask(ctx, func(_ *pipeline.Machine, s *pipeline.State) { inForce = s.Card.Hash }); err != nil || inForce == hash {
		return err
	}
	res, err := w.loop.Act(ctx, pipeline.Action{
		Do: pipeline.DoCardLoad, Card: &c, CardText: text, CardHash: hash, By: c.By, Role: "engineer", Reason: "watch --card", RequestID: rand.Text(),
	})
	return errors.Join(err, res.Err)
}

func faultsOf(what string, faults []config.Fault) error {
	if len(faults) == 0 {
		return nil
	}
	var b strings.Builder
	listFaults(&b, faults)
	return fmt.Errorf("%s:\n%s", what, strings.TrimRight(b.String(), "\n"))
}

// remote is a running watch that a command talks to.
type remote struct {
	base, by, token string
	rig             pipeline.RigInfo
}

// remoteFlags are the flags by which a running watch is reached.
func remoteFlags(fs *pflag.FlagSet) func(context.Context) (*remote, error) {
	base := fs.String("url", "http://127.0.0.1:8189", "address of the watch")
	by := fs.String("by", "", "who does it, where nobody signs in")
	tokenFile := fs.String("token-file", "", "file with a token, for a watch with users")
	return func(ctx context.Context) (*remote, error) {
		r := &remote{base: strings.TrimRight(*base, "/"), by: *by}
		var err error
		if r.token, err = readSecret(*tokenFile); err != nil {
			return nil, err
		}
		var rigs []pipeline.RigInfo
		if err := call(ctx, http.MethodGet, r.base+"/api/rigs", r.token, nil, &rigs); err != nil {
			return nil, err
		}
		if len(rigs) == 0 {
			return nil, errors.New("no rig is watched there")
		}
		r.rig = rigs[0]
		return r, nil
	}
}

func (r *remote) path(rest string) string {
	return r.base + "/api/rigs/" + url.PathEscape(r.rig.ID) + rest
}

// get asks for something of the rig.
func (r *remote) get(ctx context.Context, rest string, v any) error {
	return call(ctx, http.MethodGet, r.path(rest), r.token, nil, v)
}

// post does something on the rig.
func (r *remote) post(ctx context.Context, rest string, body map[string]any) error {
	body["by"], body["request_id"] = r.by, rand.Text()
	text, err := json.Marshal(body)
	if err != nil {
		return fmt.Errorf("request: %w", err)
	}
	return call(ctx, http.MethodPost, r.path(rest), r.token, text, nil)
}

const cardUsage = `card [show | load FILE | take | accept N | reject N | skip | go-to POINT]

The test card of a running watch. show (the default) tells how far it is; load puts a card
into force in place of the one that is; take takes the current point; accept and reject judge
the one of number N; skip leaves the current one out; go-to makes POINT of the card the current one.
load, accept and reject are for an engineer; reject and skip need a --reason, as does a point
that is taken while the engine is not stabilised.`

// cardCommand shows or does something with the test card of a running watch. It gives 1
// when that is refused, 2 when called wrongly.
func cardCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	usage, what, _ := strings.Cut(cardUsage, "\n\n")
	fs := newFlags(usage, what, stderr)
	to := remoteFlags(fs)
	reason := fs.String("reason", "", "why")
	asJSON := fs.Bool("json", false, "with show: JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	rest = append(rest, "show")[:max(len(rest), 1)]
	path, body, err := cardRequest(rest, *reason)
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch card:", err)
		return 2
	}
	r, err := to(ctx)
	if err == nil && path != "" {
		err = r.post(ctx, path, body)
	}
	if err == nil {
		err = r.showCard(ctx, stdout, *asJSON)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch card:", err)
		return 1
	}
	return 0
}

// cardRequest gives what is posted for the words of the command; "" for show.
func cardRequest(words []string, reason string) (path string, body map[string]any, err error) {
	body = map[string]any{"reason": reason}
	do := words[0]
	wanted := map[string]string{"show": "", "take": "", "skip": "", "load": "a file", "accept": "the number of a point", "reject": "the number of a point", "go-to": "a point of the card"}
	operand, ok := wanted[do]
	switch {
	case !ok:
		return "", nil, fmt.Errorf("%q is none of show, load, take, accept, reject, skip, go-to", do)
	case len(words)-1 != min(len(operand), 1):
		return "", nil, fmt.Errorf("%s: give %s", do, strings.TrimPrefix(operand+" and nothing else", " and "))
	case do == "show":
		return "", nil, nil
	case do == "load":
		text, err := os.ReadFile(words[1])
		if err != nil {
			return "", nil, fmt.Errorf("test card: %w", err)
		}
		body["text"] = string(text)
		return "/card", body, nil
	case operand != "":
		n, err := strconv.ParseUint(words[1], 10, 31)
		if err != nil {
			return "", nil, fmt.Errorf("%s %q: give %s", do, words[1], operand)
		}
		key := "number"
		if do == "go-to" {
			key = "point"
		}
		body[key] = n
	}
	return "/card/" + do, body, nil
}

func (r *remote) showCard(ctx context.Context, stdout io.Writer, asJSON bool) error {
	var answer struct {
		Card *card.State `json:"card"`
	}
	if err := r.get(ctx, "/card", &answer); err != nil {
		return err
	}
	if asJSON {
		return printJSON(stdout, answer)
	}
	printCard(stdout, answer.Card, r.rig.Zone())
	return nil
}

func printCard(w io.Writer, s *card.State, zone *time.Location) {
	if s == nil {
		_, _ = fmt.Fprintln(w, "no test card is in force")
		return
	}
	_, _ = fmt.Fprintf(w, "Test card %s, %s, by %s; loaded by %s at %s %s\n", s.Label(), phrase(s.Title, named("for engine ", s.For)), s.By, s.LoadedBy, stamp(s.Loaded, zone), zoneName(zone))
	if s.Unfit != "" {
		_, _ = fmt.Fprintf(w, "It cannot be followed: %s\n", s.Unfit)
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "\tPOINT\tNAME\tTARGETS\tSOAK, AVERAGE\tCHOKE\tSTATUS\tTAKEN AS")
	for i := range s.Points {
		pt, p := &s.Points[i], &s.Progress[i]
		var targets, numbers []string
		for _, x := range pt.Targets {
			targets = append(targets, strings.TrimPrefix(x.Quantity, "channel.")+" "+x.Text)
		}
		for _, n := range p.Numbers {
			numbers = append(numbers, strconv.FormatUint(n, 10))
		}
		mark, status := "", p.Status
		if i == s.At {
			mark = ">"
		}
		if p.Reason != "" {
			status += ": " + oneLine(p.Reason)
		}
		if pt.Auto {
			status += " (automatic)"
		}
		_, _ = fmt.Fprintf(t, "%s\t%d\t%s\t%s\t%g s, %g s\t%s\t%s\t%s\n", mark, i+1, oneLine(pt.Name), strings.Join(targets, ", "), pt.Soak, pt.Average, pt.Choke, status, strings.Join(numbers, ", "))
	}
	_ = t.Flush()
	switch pt := s.Current(); {
	case pt == nil:
		_, _ = fmt.Fprintln(w, "No point is open.")
	case s.Now.Averaging:
		_, _ = fmt.Fprintf(w, "Point %d is being averaged, %.1f s are left.\n", s.At+1, s.Now.AveragingLeft)
	case s.Hindrance() == "":
		_, _ = fmt.Fprintf(w, "Point %d: the engine is stabilised.\n", s.At+1)
	default:
		_, _ = fmt.Fprintf(w, "Point %d is not stabilised: %s.\n", s.At+1, s.Hindrance())
	}
	if len(s.Taken) == 0 {
		return
	}
	_, _ = fmt.Fprintln(w)
	t = tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	_, _ = fmt.Fprintln(t, "NUMBER\tNAME\tFROM ("+zoneName(zone)+")\tSTATUS\tNPR\tMARGIN\tDOUBTS")
	for i := range s.Taken {
		k := &s.Taken[i]
		status := k.Status
		if k.JudgedBy != "" {
			status += " by " + k.JudgedBy
		}
		if k.Reason != "" {
			status += ": " + oneLine(k.Reason)
		}
		_, _ = fmt.Fprintf(t, "%d\t%s\t%s\t%s\t%s\t%s\t%s\n", k.Number, oneLine(k.Name), stamp(k.From, zone), status,
			takenValue(k, "npr", 4), takenValue(k, "choke_margin_percent", 2), strings.Join(k.Doubts, "; "))
	}
	_ = t.Flush()
}

// takenValue gives a value of a point with its uncertainty.
func takenValue(k *card.Taken, name string, digits int) string {
	for _, v := range k.Values {
		if v.Name == name && v.Value.Known {
			text := strconv.FormatFloat(v.Value.V, 'f', digits, 64)
			if v.U95.Known {
				text += " ± " + strconv.FormatFloat(v.U95.V, 'f', digits, 64)
			}
			return strings.TrimSpace(text + " " + v.Unit)
		}
	}
	return "–"
}
