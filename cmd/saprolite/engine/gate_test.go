package engine

import (
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/alerts"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// now is what the gate's tests have as the time of the last tick.
var now = time.Date(2031, time.April, 11, 7, 0, 0, 0, time.UTC)

// gate hands one message to an engine that has seen a tick.
func gate(t *testing.T, m Message) (Outcome, Counts) {
	t.Helper()
	opts := options(nil, &alerts.Memory{})
	opts.Sources[2].Ranges = map[quantity.Quantity]Range{quantity.AirTemperature: {Lo: -5, Hi: 35}}
	e := open(t, opts)
	take(t, e, tick(now))
	m.Seq = 7
	if m.Stored.IsZero() {
		m.Stored = now.Add(time.Minute)
	}
	out, err := e.Handle(m)
	if err != nil {
		t.Fatal(err)
	}
	if e.Cursor() != 7 {
		t.Errorf("cursor %d, want 7: what is held is taken in", e.Cursor())
	}
	if c := e.Counts(); c.Held != uint64(len(out.Held)) {
		t.Errorf("counted %d held, returned %d", c.Held, len(out.Held))
	}
	return out, e.Counts()
}

// What cannot be used is held with a code and a reason that says what to do;
// what is good in the same pack is kept.
func TestGateHolds(t *testing.T) {
	const (
		good = `{"n":"precipitation","u":"mm","t":1933628400,"v":3}` // 2031-04-10T23:00:00Z, the end of the day before the tick
		head = "source,quantity,start,end,value,unit,sd,flag,available\n"
	)
	for _, c := range []struct {
		name, subject, kind, body string
		held                      [][3]string // code, where it goes, what the reason says to do
		kept                      uint64
	}{
		{"a source nobody knows", "obs.loggers.gauge-9", TypeSenML, `[` + good + `]`,
			[][3]string{{"unregistered-source", "held.loggers.gauge-9", "add it to the stands file, or correct the id"}}, 0},
		{"the wrong feed", "obs.orbit.gauge-1", TypeSenML, `[` + good + `]`,
			[][3]string{{"wrong-feed", "held.orbit.gauge-1", `belongs to feed "loggers"; change "feed" in the stands file, or send it there`}}, 0},
		{"the operator's load may speak for all", "obs.load.gauge-1", TypeSenML, `[` + good + `]`, nil, 1},
		{"a source of no feed takes any", "obs.orbit.gauge-2", TypeSenML, `[` + good + `]`, nil, 1},
		{"no content type is SenML", "obs.loggers.gauge-1", "", `[` + good + `]`, nil, 1},
		{"out of range, and a good record beside it", "obs.loggers.gauge-1", TypeSenML, `[` + good + `,{"n":"precipitation","u":"mm","t":1933542000,"v":-3}]`,
			[][3]string{{"out-of-range", "held.loggers.gauge-1", "check unit and sign"}}, 1},
		{"out of the source's own range", "obs.loggers.mast-1", TypeSenML, `[{"n":"air_temperature","u":"Cel","t":1933628400,"v":36},{"n":"air_temperature","u":"Cel","t":1933542000,"v":35}]`,
			[][3]string{{"out-of-range", "held.loggers.mast-1", "possible is -5 to 35"}}, 1},
		{"the future, and a day ahead beside it", "obs.loggers.gauge-1", TypeSenML, `[{"n":"precipitation","u":"mm","t":1933743661,"v":1},{"n":"precipitation","u":"mm","t":1933743660,"v":2}]`,
			[][3]string{{"future", "held.loggers.gauge-1", "check the logger's clock and the year"}}, 1},
		{"not SenML", "obs.loggers.gauge-1", TypeSenML, `{"rain":3}`,
			[][3]string{{"unreadable", "held.loggers.gauge-1", "want"}}, 0},
		{"a unit of something else, a name nobody knows, and a good record", "obs.loggers.gauge-1", TypeSenML,
			`[{"n":"precipitation","u":"Cel","t":1933628400,"v":3},{"n":"rain","u":"mm","t":1933628400,"v":3},` + good + `]`,
			[][3]string{{"unknown-unit", "held.loggers.gauge-1", "mm"}, {"unknown-quantity", "held.loggers.gauge-1", `did you mean "precipitation"`}}, 1},
		{"a row of another source, a bad row, and a good one", "obs.load.gauge-1", TypeCSV,
			head + "gauge-2,precipitation,2031-04-09,,3,mm,,,\ngauge-1,precipitation,2031-04-09,,much,mm,,,\ngauge-1,precipitation,2031-04-09,,4,mm,,,\n",
			[][3]string{{"bad-source", "held.load.gauge-1", "send each source's rows under its own subject"}, {"bad-value", "held.load.gauge-1", "line 3"}}, 1},
		{"a composite of many days", "obs.load.sat-1", TypeCSV, head + "sat-1,evi,2031-04-01,2031-04-09,0.4,1,,,\n",
			[][3]string{{"not-kept", "held.load.sat-1", "send daily values"}}, 0},
		{"a header that lacks columns", "obs.load.gauge-1", TypeCSV, "source,start,value\n",
			[][3]string{{"bad-column", "held.load.gauge-1", `column "quantity" is missing`}}, 0},
		{"a subject that is none", "obs.loggers.Gauge.1", TypeSenML, `[` + good + `]`,
			[][3]string{{"unreadable", "held.unknown.unknown", "obs.<feed>.<source>"}}, 0},
		{"a tick that is none", TickSubject, "", "noon",
			[][3]string{{"unreadable", "held.clock.tick", "not an RFC 3339 time"}}, 0},
	} {
		t.Run(c.name, func(t *testing.T) {
			out, counts := gate(t, Message{Subject: c.subject, ContentType: c.kind, Data: []byte(c.body)})
			if counts.Observations != c.kept {
				t.Errorf("%d observations kept, want %d", counts.Observations, c.kept)
			}
			if len(out.Held) != len(c.held) {
				t.Fatalf("held %+v, want %d", out.Held, len(c.held))
			}
			for i, want := range c.held {
				h := out.Held[i]
				if h.Code != want[0] || h.Subject() != want[1] || !strings.Contains(h.Reason, want[2]) || h.Seq != 7 {
					t.Errorf("held %+v\nwant code %s on %s, reason with %q, of message 7", h, want[0], want[1], want[2])
				}
			}
		})
	}
}

// What a broker took while no tick came is not of the future.
func TestBrokerGoesOnWithoutTicks(t *testing.T) {
	d := quantity.DayOf(now, zone) + 5
	for _, c := range []struct {
		name   string
		stored time.Time
		held   int
	}{
		{"stored when it had ended", d.End(zone).Add(time.Minute), 0},
		{"stored before it began", d.Start(zone).Add(-time.Minute), 1},
	} {
		t.Run(c.name, func(t *testing.T) {
			m := pack(t, daily("gauge-1", quantity.Precipitation, d, 3))
			m.Stored = c.stored
			if out, _ := gate(t, m); len(out.Held) != c.held {
				t.Errorf("held %+v, want %d", out.Held, c.held)
			}
		})
	}
}

// A live value became known when the broker stored it, a loaded one when it
// says, by default at its end.
func TestAvailable(t *testing.T) {
	stored := now.Add(-time.Hour)
	d := quantity.DayOf(now, zone) - 2
	said := d.End(zone).Add(3 * time.Hour)
	whole := daily("gauge-1", quantity.Precipitation, d, 3)
	whole.Available = time.Time{}
	whenKnown := whole
	whenKnown.Available = said
	for _, c := range []struct {
		name string
		m    Message
		want time.Time
	}{
		{"live", pack(t, whole), stored},
		{"live CSV", Message{Subject: "obs.loggers.gauge-1", ContentType: TypeCSV, Data: loaded(t, []observation.Observation{whole})[0].Data}, stored},
		{"loaded", loaded(t, []observation.Observation{whole})[0], d.End(zone)},
		{"loaded with a time", loaded(t, []observation.Observation{whenKnown})[0], said},
	} {
		t.Run(c.name, func(t *testing.T) {
			e := open(t, options(nil, &alerts.Memory{}))
			c.m.Stored = stored
			take(t, e, c.m)
			v, ok, err := e.sources["gauge-1"].book.Day(quantity.Precipitation, d)
			if err != nil || !ok || v.Value != 3 || !v.Available.Equal(c.want) {
				t.Errorf("day value %+v (%v, %v), want it known at %s", v, ok, err, c.want)
			}
		})
	}
}

// A message that was taken in before is passed over.
func TestMessageIsTakenInOnce(t *testing.T) {
	e := open(t, options(nil, &alerts.Memory{}))
	first, again := pack(t, daily("gauge-1", quantity.Precipitation, firstDay, 3)), pack(t, daily("gauge-1", quantity.Precipitation, firstDay, 5))
	first.Seq, again.Seq = 4, 4
	again.Stored = again.Stored.Add(time.Hour)
	take(t, e, first, again)
	v, _, err := e.sources["gauge-1"].book.Day(quantity.Precipitation, firstDay)
	if diff := cmp.Diff(3.0, v.Value); diff != "" || err != nil {
		t.Errorf("value %v (%v), want the first", v, err)
	}
}

// What is held comes with its text, so that somebody can act on it.
func TestHeldRowHasItsText(t *testing.T) {
	const bad = "gauge-1,precipitation,2031-04-09,much,mm"
	out, _ := gate(t, Message{Subject: "obs.load.gauge-1", ContentType: TypeCSV,
		Data: []byte("source,quantity,start,value,unit\ngauge-1,precipitation,2031-04-08,4,mm\r\n" + bad + "\r\n")})
	if len(out.Held) != 1 || out.Held[0].Record != bad {
		t.Errorf("held %+v, want the row %q", out.Held, bad)
	}
}
