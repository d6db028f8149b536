package published_test

import (
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/proto"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// A certificate in local time is the same certificate: nothing is recorded, and a
// reading at the very instant is under it, one a nanosecond before is not.
func TestCertificatesInLocalTime(t *testing.T) {
	s := startMoving(t)
	local := strings.NewReplacer(`"2026-01-01T00:00:00Z"`, `"2026-01-01T05:45:00+05:45"`, `"2026-03-01T10:00:00Z"`, `"2026-03-01T06:30:00-03:30"`)
	again := new(leadlinev1.Instrument)
	s.call("PUT", "/v1/instruments/probe-1", local.Replace(thermometers[0].declaration)).into(again)
	if again.GetRevision() != 1 {
		t.Errorf("in local time it is revision %d", again.GetRevision())
	}
	for _, tt := range []struct {
		time       string
		validFrom  string // of the bias that the belief then knows
		difference string
	}{
		{"2026-03-01T06:29:59.999999999-03:30", "2026-01-01T00:00:00Z", "a nanosecond before the second calibration"},
		{"2026-03-01T06:30:00-03:30", "2026-03-01T10:00:00Z", "at its valid_from"},
	} {
		s.postAll([]posted{{Quantity: "ice-water/bath", Value: 0.3, Instrument: "probe-1", Time: tt.time}})
		at, err := time.Parse(time.RFC3339Nano, tt.time)
		if err != nil {
			t.Fatal(err)
		}
		if b := s.belief("ice-water/bath", at); rfc3339(b.GetBiases()[0].GetValidFrom().AsTime()) != tt.validFrom {
			t.Errorf("%s: biases %v, want that of %s", tt.difference, b.GetBiases(), tt.validFrom)
		}
	}
}

// A clock that steps back by two hours: instruments are declared and retired, a
// renewal is made, and readings without a time are folded where they belong, all as
// of the early clock. A renewal in what is now the future is refused.
func TestClockStepsBackUnderInstruments(t *testing.T) {
	s := startMoving(t)
	all := movingReadings(7)
	s.postAll(all)
	s.clock.Advance(-2 * time.Hour)
	early := s.clock.Now()
	before := s.snapshotMoving()
	ahead := `{"time":"` + rfc3339(early.Add(time.Hour)) + `","prior":{"mean":0,"standard_deviation":1}}`
	if a := s.call("POST", quantityPath("compressor-2/bearing")+":renew", ahead); a.code != bad || a.problem().field != "time" {
		t.Errorf("a renewal in the future gives %d %s", a.code, a.body)
	}
	s.declareInstrument("probe-1", thermometers[0].declaration)
	wantSameBeliefs(t, "on the early clock", s.snapshotMoving(), before)

	s.postAll([]posted{{Quantity: "brine/return", Value: 0.4, Instrument: "probe-1", ID: "late"}})
	renewal := new(leadlinev1.Renewal)
	s.call("POST", quantityPath("compressor-2/bearing")+":renew", `{"prior":{"mean":0.1,"standard_deviation":0.3},"request_id":"job 7"}`).into(renewal)
	if !renewal.GetTime().AsTime().Equal(early) {
		t.Errorf("renewed at %v, want %v", renewal.GetTime().AsTime(), early)
	}
	s.checkEverything("on the early clock")

	tidy := startMoving(t)
	tidy.call("POST", quantityPath("compressor-2/bearing")+":renew",
		`{"time":"`+rfc3339(early)+`","prior":{"mean":0.1,"standard_deviation":0.3},"request_id":"job 7"}`).ok()
	tidy.postAll(append(all, posted{Quantity: "brine/return", Value: 0.4, Instrument: "probe-1", ID: "late", Time: rfc3339(early)}))
	after := s.snapshotMoving()
	wantSameBeliefs(t, "as if the clock had been right", after, tidy.snapshotMoving())
	if proto.Equal(after["brine/return at 10:30"], before["brine/return at 10:30"]) {
		t.Error("the late reading changed nothing")
	}
	s = s.afterCrash("on the early clock")
	s = s.restart()
	wantSameBeliefs(t, "restarted on the early clock", s.snapshotMoving(), after)
}
