package pipeline

import (
	"encoding/json"
	"fmt"
	"testing"

	"throatwatch/ingest"
	"throatwatch/monitor/calib"
	"throatwatch/monitor/compute"
	"throatwatch/rules"
)

// numbered is a bed whose runs are numbered in a series.
func numbered(tb testing.TB, series string) *bed {
	tb.Helper()
	parse := parser(tb)
	b := &bed{tb: tb, s: &State{}, r: ingest.Record{Host: epoch - second}}
	b.m = NewMachine(func(bundle []byte) (Config, error) {
		cfg, err := parse(bundle)
		cfg.Run.Series, cfg.Run.Width = series, 3
		cfg.Rig.EngineBuild, cfg.Rig.NozzleSerial, cfg.Rig.Test, cfg.Rig.Purpose, cfg.Rig.Fuel.Batch = "7", "NZ-1", "T-1", "a test", "F-1"
		return cfg, err
	})
	b.record(ingest.KindBoot, `{"epoch":1}`)
	b.record(ingest.KindConfig, "rig one")
	return b
}

// boot is a boot record that brings what stored runs know.
func (b *bed) boot(boot Boot) {
	b.tb.Helper()
	text, err := json.Marshal(boot)
	if err != nil {
		b.tb.Fatal(err)
	}
	b.record(ingest.KindBoot, string(text))
}

// lightingUp is what the channels read between light-off and idle.
var lightingUp = engine{103e3, 700, 750, 101.2e3, 4000, 200}

// aRun is a start, a little idling and a shutdown until the run has ended.
func (b *bed) aRun() {
	b.play(atRest, 3*second)
	b.play(turning, second)
	b.play(lightingUp, 2*second)
	b.play(idling, 2*second)
	b.play(atRest, 9*second)
}

// Each run has the next number; a run that is given up has one too, and a lost state
// goes on behind what is stored.
func TestRunNumbers(t *testing.T) {
	b := numbered(t, "E/7/{run}")
	b.aRun()
	r := b.s.Run
	if r.Designation != "E/7/001" || r.Series != "E/7/{run}" || r.InSeries != 1 || r.Aborted || r.Ended == 0 {
		t.Fatalf("%+v", r)
	}
	if r.EngineBuild != "7" || r.NozzleSerial != "NZ-1" || r.Test != "T-1" || r.Purpose != "a test" || r.FuelBatch != "F-1" {
		t.Errorf("%+v", r)
	}
	b.play(turning, second) // lit, and given up before idle
	b.play(lightingUp, 2*second)
	b.play(atRest, 9*second)
	if r := b.s.Run; r.Designation != "E/7/002" || !r.Aborted || r.Ended == 0 {
		t.Errorf("%+v", r)
	}
	b.play(turning, 2*second) // cranked without a flame: no start
	b.play(atRest, 9*second)
	if r := b.s.Run; r.Designation != "E/7/003" || r.Aborted || r.Ended == 0 {
		t.Errorf("%+v", r)
	}
	life, _ := b.s.Life("ML5-0042")
	nozzle, ok := b.s.NozzleLife("NZ-1")
	if life.Starts != 2 || life.Aborted != 1 || life.Cycles != 1 || !ok || nozzle.Starts != 2 || nozzle.Aborted != 1 || nozzle.Cycles != 1 {
		t.Errorf("engine %+v, nozzle %+v", life, nozzle)
	}

	// The state is lost; the run files are not, and one of another series was removed.
	life.Hours, life.Bands[0].Seconds = 12.5, 3
	past := Past{Runs: 9, Series: []Series{{"E/7/{run}", 3}, {"E/6/{run}", 41}}, Engines: []Life{life}, Nozzles: []NozzleLife{nozzle}}
	lost := numbered(t, "E/7/{run}")
	lost.boot(Boot{Epoch: 2, Past: past})
	lost.aRun()
	if r := lost.s.Run; r.Designation != "E/7/004" || r.Number != 10 {
		t.Errorf("after the loss %+v", r)
	}
	now, _ := lost.s.Life("ML5-0042")
	if now.Starts != 3 || now.Aborted != 1 || now.Hours < 12.5 || now.Hours > 12.51 || now.Bands[0].Seconds != 3 {
		t.Errorf("after the loss %+v", now)
	}
	if again := lost.s.Lacks(past); again.Runs != 0 || len(again.Series)+len(again.Engines)+len(again.Nozzles) != 0 {
		t.Errorf("brought a second time: %+v", again)
	}
	// A state that knows more takes nothing.
	b.boot(Boot{Epoch: 2, Past: Past{Series: []Series{{"E/7/{run}", 2}}}})
	b.aRun()
	if r := b.s.Run; r.Designation != "E/7/004" {
		t.Errorf("%+v", r)
	}
	// Records of another data system get no number of ours.
	in := numbered(t, "E/7/{run}")
	in.boot(Boot{Epoch: 2, Imported: true})
	in.aRun()
	if r := in.s.Run; r.Designation != "" || r.InSeries != 0 || r.Number != 1 || r.Test != "T-1" {
		t.Errorf("imported %+v", r)
	}
}

// Of more series than are kept, one that comes back has no number twice.
func TestManySeries(t *testing.T) {
	var n Numbering
	given := map[string]bool{}
	for i := range 5 * seriesKept {
		of := fmt.Sprint(i%(seriesKept+50), RunPlace)
		for range 1 + i%3 {
			number := fmt.Sprint(of, n.next(of))
			if given[number] {
				t.Fatalf("%s is given twice", number)
			}
			given[number] = true
		}
	}
	if len(n.Series) != seriesKept {
		t.Errorf("%d series are kept", len(n.Series))
	}
}

// A sensor that a station value rests on raises an alarm once its due day is over, unless
// somebody answers for it; one that nothing rests on does not.
func TestExpiredCalibration(t *testing.T) {
	parse := parser(t)
	b := &bed{tb: t, s: &State{}, r: ingest.Record{Host: epoch - second}}
	b.m = NewMachine(func(bundle []byte) (Config, error) {
		cfg, err := parse(bundle)
		list := cfg.Compute.Channels
		list[0].Record = calib.Record{Serial: "P-1", Expires: epoch + 5*second} // p7
		list[2].Record = calib.Record{Serial: "T-1", Expires: epoch, Waiver: calib.Waiver{Who: "M. Oduya", Why: "spare", Ends: epoch + 10*second}}
		list[5].Record = calib.Record{Serial: "O-1", Expires: epoch} // p_oil, of no station
		list[3].Record = calib.Record{Serial: "X-1", Expires: epoch}
		list[3].Swaps = []compute.Swap{{From: epoch, Record: calib.Record{Serial: "X-2", Expires: epoch + 15*second}}}
		cfg.Rules = append(cfg.Rules, rules.Rule{
			Name: "expired", When: "calibrations_expired > 0", Priority: rules.Advisory, WorsenBy: 1,
			Title: "expired", Text: "{expired_sensor} of {calibrations_expired:.0}", Caution: "-", Response: "-",
		})
		return cfg, err
	})
	b.record(ingest.KindBoot, `{"epoch":1}`)
	b.record(ingest.KindConfig, "rig one")
	for _, tt := range []struct {
		d     int64
		count float64
		text  string
	}{{4 * second, 0, ""}, {5 * second, 1, "p7 of 1"}, {5 * second, 2, "p7 of 1"}, {5 * second, 3, "p7 of 1"}} {
		b.play(atRest, tt.d)
		a, ok := b.alarm("expired")
		if ok != (tt.text != "") || a.Text != tt.text || a.Value.V != tt.count && ok {
			t.Errorf("after %v: %v %q %+v, want %q and %g", tt.d, ok, a.Text, a.Value, tt.text, tt.count)
		}
	}
}
