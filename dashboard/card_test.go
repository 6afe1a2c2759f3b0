package dashboard_test

import (
	"encoding/json"
	"net/http"
	"strings"
	"testing"
	"time"

	"throatwatch/dashboard"
	"throatwatch/rules"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// twoPoints reads a text that is JSON here: how YAML becomes a card is not this server's.
func twoPoints(text string, cfg *pipeline.Config) (c card.Card, hash string, faults []dashboard.Fault) {
	if err := json.Unmarshal([]byte(text), &c); err != nil {
		return c, "", []dashboard.Fault{{At: "card:1:1", Message: err.Error(), Hint: "write it well"}}
	}
	if err := cfg.FitsCard(&c); err != nil {
		return c, "", []dashboard.Fault{{At: "card:1:1", Message: err.Error(), Hint: "write it well"}}
	}
	return c, "hash", nil
}

// A card is loaded, its points are taken and judged, and frames, hello, hand-over sheet
// and answers tell so; what is refused says why.
func TestCard(t *testing.T) {
	d := makeDesk()
	d.cfg.ParseCard = twoPoints
	d.begin()
	d.serve(d)
	t.Cleanup(d.close)
	speed := func(low, high float64) card.Target {
		return card.Target{Quantity: "speed_rpm", Title: "Rotor speed", Unit: "rpm", Text: "as set", Low: rules.Reading{V: low, Known: true}, High: rules.Reading{V: high, Known: true}}
	}
	want := card.Card{Title: "Choking", Number: "TC-1", Revision: "A", By: "Mara Lindqvist", Points: []card.Point{
		{Name: "idle", Targets: []card.Target{speed(9400, 9600)}, Average: 1, Choke: card.Disarmed},
		{Name: "top", Targets: []card.Target{speed(20800, 21000)}, Average: 1, Choke: card.Armed},
	}}
	text, err := json.Marshal(want)
	if err != nil {
		t.Fatal(err)
	}
	body, err := json.Marshal(map[string]string{"text": string(text), "by": "Mara Lindqvist", "request_id": "c1"})
	if err != nil {
		t.Fatal(err)
	}
	const cardPath = rigPath + "/card"
	if a := d.get(t, cardPath); a.status != http.StatusOK || strings.TrimSpace(string(a.body)) != `{"card":null}` {
		t.Errorf("without a card: %d %s", a.status, a.body)
	}
	do := func(what, action, body string, status int, detail string) {
		t.Helper()
		path := cardPath
		if action != "" {
			path += "/" + action
		}
		checkStatus(t, what, d.call(t, post, path, body), status, detail)
	}
	do("take without a card", "take", `{"request_id":"t0"}`, http.StatusConflict, "no test card")
	do("a card with faults", "", `{"text":"title"}`, http.StatusUnprocessableEntity, "faults")
	do("a card", "", string(body), http.StatusAccepted, "")
	do("take without a run", "take", `{}`, http.StatusConflict, "no run is on")
	test := engineTest()
	msgs := play(start, test, 21*time.Second, nil)
	until := func(seconds float64) {
		n := 0
		for n < len(msgs) && float64(msgs[n].due-start)/1e9 < seconds {
			n++
		}
		d.send(msgs[:n])
		msgs = msgs[n:]
	}
	until(4.5)
	do("take off the target", "take", `{}`, http.StatusConflict, "not stabilised: Rotor speed is not at as set")
	do("no such action", "fly", `{}`, http.StatusNotFound, "fly")
	do("no such number", "accept", `{"number":9}`, http.StatusNotFound, "no point of this number")
	do("no such point", "go-to", `{"point":9}`, http.StatusNotFound, "no such point")
	do("a skip without a reason", "skip", `{}`, http.StatusBadRequest, "reason")
	until(5.6)
	do("take", "take", `{"by":"Ida Holm","request_id":"t1"}`, http.StatusAccepted, "")
	until(8)
	do("a reject without a reason", "reject", `{"number":1}`, http.StatusBadRequest, "reason")
	do("reject", "reject", `{"number":1,"reason":"valve moved","by":"Mara Lindqvist","request_id":"r1"}`, http.StatusAccepted, "")
	do("go to", "go-to", `{"point":2}`, http.StatusAccepted, "")
	until(11)
	do("take all the same", "take", `{"by":"Ida Holm","reason":"asked for","request_id":"t2"}`, http.StatusAccepted, "")
	until(21)
	do("accept", "accept", `{"number":2,"by":"Mara Lindqvist","request_id":"a1"}`, http.StatusAccepted, "")

	got := into[struct{ Card card.State }](t, d.get(t, cardPath)).Card
	if len(got.Taken) != 2 || got.Taken[0].Status != card.Rejected || got.Taken[0].Reason != "valve moved" || got.Taken[1].Status != card.Accepted || len(got.Taken[1].Values) < 5 || got.At != 0 {
		t.Errorf("card %+v", got)
	}
	hello := into[struct{ Card card.State }](t, d.get(t, rigPath+"/hello")).Card
	if len(hello.Taken) != 2 || hello.Title != "Choking" {
		t.Errorf("hello %+v", hello)
	}
	var statuses []string
	armed := 0
	for _, f := range d.sent() {
		switch f.kind {
		case "card":
			checkJSON(t, "CardFrame", f.body)
		case "card_point":
			statuses = append(statuses, dig(checkJSON(t, "CardPointFrame", f.body), "point.status").(string))
		case "operating_point":
			if strings.Contains(string(f.body), `"choke_armed_by":"test_card"`) {
				armed++
			}
		}
	}
	if strings.Join(statuses, " ") != "taken rejected taken accepted" || armed == 0 {
		t.Errorf("points told %q; %d scans armed by the card", statuses, armed)
	}

	sheet := into[dashboard.Handover](t, d.get(t, rigPath+"/handover?by=Ida%20Holm"))
	if c := sheet.Card; sheet.By != "Ida Holm" || c == nil || len(c.Open) != 1 || c.Open[0] != "idle" || len(c.Awaiting) != 0 || sheet.LimitsVersion != "ML5-LIM-C" || len(sheet.Notes) < 6 {
		t.Errorf("hand-over sheet %+v", sheet)
	}
	if len(sheet.Alarms.Standing)+len(sheet.Alarms.Shelved)+len(sheet.Alarms.OutOfService)+len(sheet.Alarms.Suppressed) != len(into[[]rules.Alarm](t, d.get(t, "/api/alarms"))) {
		t.Errorf("alarms %+v", sheet.Alarms)
	}
}
