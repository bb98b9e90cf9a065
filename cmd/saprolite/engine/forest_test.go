package engine

import (
	"cmp"
	"encoding/json"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"saprolite/alerts"
	"saprolite/detectors"
	"saprolite/detectors/climate"
	"saprolite/detectors/finding"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// The tests play in an invented forest with wet winters and dry summers:
// ashlar over a small store, birchen whose store must be found from its own
// years, cobble over a smaller store with a gauge of its own that often fails.

const (
	zone     = time.Hour // of all sources and most stands
	wholeDay = 24 * time.Hour
)

var (
	nan      = math.NaN()
	firstDay = quantity.DateOf(2031, time.September, 1)
)

func sources() []SourceSetup {
	return []SourceSetup{
		{ID: "gauge-1", Feed: "loggers", Offset: zone, Interval: wholeDay},
		{ID: "gauge-2", Offset: zone, Interval: wholeDay},
		{ID: "mast-1", Feed: "loggers", Offset: zone, Interval: wholeDay},
		{ID: "sat-1", Feed: "orbit", Offset: zone, Interval: wholeDay},
	}
}

func stands() []StandSetup {
	setup := func(id string, limit float64) StandSetup {
		return StandSetup{
			Info:   alerts.Stand{ID: id, Name: strings.ToUpper(id[:1]) + id[1:], Groups: []string{"upper"}, Hectares: 12},
			Offset: zone,
			Options: detectors.Options{
				ID: id, Site: climate.Site{Latitude: 36, Elevation: 400}, Coefficient: 1, CanopyStore: 1,
				StorageLimit: quantity.Millimetres(limit), ExtraWater: "none", YearStart: 1,
				StoreLow: detectors.StoreLow{Left: [4]float64{0.40, 0.25, 0.10, 0.03}, EnterDays: 3, LeaveDays: 7}, FeedSilent: detectors.FeedSilent{Days: 3, BlindDays: 10}, RainFrom: "gauge-1", AirFrom: "mast-1",
			},
		}
	}
	rain := Draw{Quantity: quantity.Precipitation, Source: "gauge-1", Scale: 1}
	air := Draw{Quantity: quantity.ReferenceEvapotranspiration, Source: "mast-1", Scale: 1}
	green := Draw{Quantity: quantity.EVI, Source: "sat-1", Scale: 1}
	ashlar, birchen, cobble := setup("ashlar", 150), setup("birchen", nan), setup("cobble", 90)
	ashlar.Draws = []Draw{rain, air, green}
	birchen.Draws = []Draw{rain, air}
	own := rain
	own.Source = "gauge-2"
	cobble.Draws, cobble.Offset = []Draw{own, rain, air}, 2*time.Hour
	return []StandSetup{ashlar, birchen, cobble}
}

// season is the weather of a day.
func season(d quantity.Day, seed uint64) (rain, et, green float64) {
	r := rand.New(rand.NewPCG(seed, uint64(d)))
	winter := math.Cos(2 * math.Pi * (float64(d.YearDay()) - 20) / 365)
	if r.Float64() < 0.3+0.28*winter {
		rain = r.ExpFloat64() * 18
	}
	return rain, 2.5 - 2*winter, 0.5 + 0.1*winter + 0.03*r.NormFloat64()
}

// daily is a value of a source's whole day that became known half an hour
// after the day.
func daily(source string, q quantity.Quantity, d quantity.Day, v float64) observation.Observation {
	return observation.Observation{Source: source, Quantity: q, Start: d.Start(zone), End: d.End(zone), Value: v, SD: nan,
		Flag: observation.NotEvaluated, Available: d.End(zone).Add(30 * time.Minute)}
}

// history is what the forest's sources say of days days from first on, in the
// order in which it became known: with gaps, values that come late, values that
// are revised, and twelve days a year in which a gauge is silent; the first year its
// logger is read out afterwards.
func history(first quantity.Day, days int, seed uint64) []observation.Observation {
	r := rand.New(rand.NewPCG(seed, 1))
	var list []observation.Observation
	add := func(o observation.Observation) {
		if r.Float64() < 0.03 {
			o.Available = o.Available.Add(time.Duration(r.IntN(20*24)) * time.Hour)
		}
		list = append(list, o)
		if r.Float64() < 0.02 {
			o.Value *= 0.5 + r.Float64()
			o.Available = o.Available.Add(time.Duration(1+r.IntN(20*24)) * time.Hour)
			list = append(list, o)
		}
	}
	for i := range days {
		d := first + quantity.Day(i)
		rain, et, green := season(d, seed)
		o := daily("gauge-1", quantity.Precipitation, d, rain)
		switch silent := i%365 >= 40 && i%365 < 52; {
		case silent && i < 365:
			o.Available = (first + 52).Start(zone).Add(time.Hour)
			list = append(list, o)
		case !silent && r.Float64() >= 0.02:
			add(o)
		}
		if r.Float64() < 0.4 {
			add(daily("gauge-2", quantity.Precipitation, d, rain*0.8))
		}
		if r.Float64() >= 0.02 {
			add(daily("mast-1", quantity.ReferenceEvapotranspiration, d, et))
		}
		if i%5 == 0 {
			add(daily("sat-1", quantity.EVI, d, green))
		}
	}
	slices.SortStableFunc(list, func(a, b observation.Observation) int { return a.Available.Compare(b.Available) })
	return list
}

// must is what both testing.T and rapid.T are.
type must interface {
	Helper()
	Fatal(...any)
	Fatalf(string, ...any)
}

// pack is an observation as it comes in live, stored when it became known.
func pack(t must, o observation.Observation) Message {
	t.Helper()
	data, err := wire.EncodeSenML([]observation.Observation{o})
	if err != nil {
		t.Fatal(err)
	}
	feed := "loggers"
	if o.Source == "sat-1" {
		feed = "orbit"
	}
	return Message{Subject: "obs." + feed + "." + o.Source, ContentType: TypeSenML, Data: data, Stored: o.Available}
}

// loaded is a history as the operator loads it: packs of CSV, one source each.
func loaded(t must, list []observation.Observation) (packs []Message) {
	t.Helper()
	for _, s := range sources() {
		var body strings.Builder
		w := wire.NewCSVWriter(&body)
		for _, o := range list {
			if o.Source == s.ID {
				if err := w.Write(o); err != nil {
					t.Fatal(err)
				}
			}
		}
		if err := w.Flush(); err != nil {
			t.Fatal(err)
		}
		packs = append(packs, Message{Subject: "obs." + LoadFeed + "." + s.ID, ContentType: TypeCSV, Data: []byte(body.String())})
	}
	return packs
}

func tick(at time.Time) Message {
	return Message{Subject: TickSubject, Data: EncodeTick(at), Stored: at}
}

type event struct {
	at time.Time
	Message
}

// stream puts observations and ticks in the order in which they come, and
// numbers them as the broker would.
func stream(t must, list []observation.Observation, ticks []time.Time) []Message {
	t.Helper()
	events := make([]event, 0, len(list)+len(ticks))
	for _, o := range list {
		events = append(events, event{o.Available, pack(t, o)})
	}
	for _, at := range ticks {
		events = append(events, event{at, tick(at)})
	}
	slices.SortStableFunc(events, func(a, b event) int { return a.at.Compare(b.at) }) // a tick comes after what is as old as it
	return numbered(events)
}

func numbered(events []event) []Message {
	out := make([]Message, len(events))
	for i, e := range events {
		out[i] = e.Message
		out[i].Seq = uint64(i + 1)
	}
	return out
}

// everyDay ticks at seven in the morning of the day after each of days days.
func everyDay(first quantity.Day, days int) []time.Time {
	ticks := make([]time.Time, days)
	for i := range ticks {
		ticks[i] = (first + quantity.Day(i) + 1).Start(zone).Add(7 * time.Hour)
	}
	return ticks
}

// shelf is a shelf in memory.
type shelf map[string][]byte

func (s shelf) Read(key string) ([]byte, error) { return s[key], nil }

func (s shelf) save(t must, e *Engine) {
	t.Helper()
	entries, err := e.Changed()
	if err != nil {
		t.Fatal(err)
	}
	for _, entry := range entries {
		s[entry.Key] = entry.Data
	}
	e.Saved()
}

func options(s shelf, record alerts.Record) Options {
	o := Options{Place: "Hollin", Stands: stands(), Sources: sources(), Record: record, Until: quantity.NoDay}
	if s != nil {
		o.Shelf = s
	}
	return o
}

// without leaves a stand out, where birchen, whose limit takes years, has nothing
// to say.
func without(id string, o Options) Options {
	o.Stands = slices.DeleteFunc(o.Stands, func(s StandSetup) bool { return s.Info.ID == id })
	return o
}

func open(t must, opts Options) *Engine {
	t.Helper()
	e, err := New(opts)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

// take hands messages to an engine, none of which may be held.
func take(t must, e *Engine, list ...Message) (told []alerts.Message) {
	t.Helper()
	for _, m := range list {
		out, err := e.Handle(m)
		if err != nil {
			t.Fatal(err)
		}
		if len(out.Held) > 0 {
			t.Fatalf("held: %+v", out.Held)
		}
		told = append(told, out.Told...)
	}
	return told
}

func dailyFile(t must, e *Engine) string {
	t.Helper()
	var b strings.Builder
	if err := e.WriteDaily(&b, quantity.NoDay); err != nil {
		t.Fatal(err)
	}
	return b.String()
}

type subject struct {
	stand string
	kind  finding.Kind
}

// openIn is what the record says is going on.
func openIn(list []alerts.Message) map[subject]finding.Level {
	open := map[subject]finding.Level{}
	for _, m := range list {
		if key := (subject{m.Stand, m.Kind}); m.Open() {
			open[key] = m.Level
		} else {
			delete(open, key)
		}
	}
	return open
}

// holds is what the accounts say is going on.
func holds(e *Engine) map[subject]finding.Level {
	open := map[subject]finding.Level{}
	for _, v := range e.Stands() {
		if v.Account == nil {
			continue
		}
		for _, f := range v.Account.Findings() {
			open[subject{f.Stand, f.Kind}] = f.Level
		}
	}
	return open
}

// jsonLines is the record as it is kept.
func jsonLines(t must, list []alerts.Message) []string {
	t.Helper()
	out := []string{}
	for _, m := range list {
		data, err := json.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		out = append(out, string(data))
	}
	return out
}

// count tells how many messages there are of each sort: so that a test can
// say that it was not about nothing.
func count(list []alerts.Message, is func(alerts.Message) bool) (n int) {
	for _, m := range list {
		if is(m) {
			n++
		}
	}
	return n
}

// eventful holds that a record has all a test should have seen.
func eventful(t *testing.T, list []alerts.Message) {
	t.Helper()
	for what, is := range map[string]func(alerts.Message) bool{
		"store-low told": func(m alerts.Message) bool { return m.Kind == finding.StoreLow && m.MsgType == alerts.Alert && m.Told },
		"store-low over": func(m alerts.Message) bool { return m.Kind == finding.StoreLow && m.EndedWhy == alerts.Over && m.Told },
		"feed-silent told": func(m alerts.Message) bool {
			return m.Kind == finding.FeedSilent && m.MsgType == alerts.Alert && m.Told
		},
		"a rise of level":     func(m alerts.Message) bool { return m.MsgType == alerts.Update && m.Told },
		"something withdrawn": func(m alerts.Message) bool { return m.EndedWhy == alerts.Corrected && m.Told && m.Late },
	} {
		if count(list, is) == 0 {
			t.Errorf("nothing in the record of the sort: %s", what)
		}
	}
}

// oncePerID holds that no message id comes twice.
func oncePerID(t must, list []alerts.Message) {
	t.Helper()
	ids := make([]string, len(list))
	for i, m := range list {
		ids[i] = m.MessageID()
	}
	slices.Sort(ids)
	if unique := slices.Compact(slices.Clone(ids)); len(unique) != len(ids) {
		t.Fatalf("%d messages have %d ids", len(ids), len(unique))
	}
}

// firstDifference is the first line in which two files differ.
func firstDifference(a, b string) string {
	la, lb := strings.Split(a, "\n"), strings.Split(b, "\n")
	for i := range min(len(la), len(lb)) {
		if la[i] != lb[i] {
			return la[i] + "\n" + lb[i]
		}
	}
	return "one has " + cmp.Or(strings.Join(la[min(len(la), len(lb)):], "\n"), strings.Join(lb[min(len(la), len(lb)):], "\n")) + " more"
}
