package points

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/rules/card"
)

// Card is what a run says of test cards: the one that was in force last, and every point
// that was taken, as it stands by the end of what is stored.
type Card struct {
	Card  *card.State  `json:"card"` // nil: there was none
	Taken []card.Taken `json:"taken"`
}

// ReadCard reads the test card of a run from its file.
func ReadCard(ctx context.Context, f *runfile.File, h *runfile.Header) (Card, error) {
	out := Card{Taken: []card.Taken{}}
	err := f.Events(ctx, h.Started, math.MaxInt64, func(e *runfile.Event) error {
		switch e.Kind {
		case "card":
			out.Card = &card.State{}
			if err := json.Unmarshal(e.JSON, out.Card); err != nil {
				return fmt.Errorf("card %d.%d: %w", e.Epoch, e.N, err)
			}
		case "card_point":
			var t card.Taken
			if err := json.Unmarshal(e.JSON, &t); err != nil {
				return fmt.Errorf("card point %d.%d: %w", e.Epoch, e.N, err)
			}
			if t.Run != h.ID && h.Origin == nil { // of the run before, judged in this one
				return nil
			}
			if i := slices.IndexFunc(out.Taken, func(o card.Taken) bool { return o.Number == t.Number }); i >= 0 {
				out.Taken[i] = t
			} else {
				out.Taken = append(out.Taken, t)
			}
		}
		return nil
	})
	if err != nil {
		return out, fmt.Errorf("test card of %s: %w", h.ID, err)
	}
	return out, nil
}

// card gives a stretch per point that was taken by a test card.
func (r *reader) card(ctx context.Context, o Options) (list []Stretch, err error) {
	c, err := ReadCard(ctx, r.f, r.h)
	for _, t := range c.Taken {
		if int64(t.From) >= o.From && int64(t.From) < o.To && len(list) < most {
			list = append(list, Stretch{From: int64(t.From), To: int64(t.To), Name: t.Name, Number: int(t.Number), Status: status(&t), doubts: t.Doubts})
		}
	}
	return list, err
}

// status says in words what became of a point.
func status(t *card.Taken) string {
	text := t.Status
	if t.Auto {
		text += ", automatically"
	}
	if t.JudgedBy != "" {
		text += " by " + t.JudgedBy
	}
	if t.Reason != "" {
		text += ": " + t.Reason
	}
	return text
}
