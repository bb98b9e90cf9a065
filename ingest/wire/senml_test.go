package wire

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"pgregory.net/rapid"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

var gauge = SenMLOptions{Source: "hollow-gauge", Received: received, Interval: time.Hour}

func TestDecodeSenML(t *testing.T) {
	end := time.Unix(1760000000, 0).UTC()
	of := func(q quantity.Quantity, v float64) observation.Observation {
		return observation.Observation{Source: "hollow-gauge", Quantity: q, Start: end.Add(-time.Hour), End: end, Value: v, SD: math.NaN(), Flag: observation.NotEvaluated}
	}
	got, problems := DecodeSenML([]byte(`[
 {"bt":1760000000,"n":"precipitation","u":"mm","v":2.4},
 {"n":"precipitation","u":"mm/h","v":2.4},
 {"n":"air_temperature","u":"Cel","v":-0.1},
 {"n":"air_temperature","u":"K","v":273.15},
 {"bn":"soil_water_","n":"content:30","u":"/","v":0.21},
 {"n":"potential:60","u":"Pa","v":-1.2e6},
 {"bn":"","n":"predawn_water_potential","u":"MPa","v":-1.2},
 {"n":"solar_radiation","u":"MJ/m2","v":1.8}
]`), gauge)
	want := []observation.Observation{
		of(quantity.Precipitation, 2.4), of(quantity.Precipitation, 2.4),
		of(quantity.AirTemperature, -0.1), of(quantity.AirTemperature, 0),
		of("soil_water_content:30", 0.21), of("soil_water_potential:60", -1.2),
		of(quantity.PredawnWaterPotential, -1.2),
		of(quantity.SolarRadiation, 500), // 1.8e6 J in 3600 s
	}
	if len(problems) > 0 {
		t.Error(problems)
	}
	if d := cmp.Diff(want, got, cmpopts.EquateNaNs()); d != "" {
		t.Error(d)
	}
}

// A record that cannot be used is told and does not take the others with it.
func TestOneBadRecord(t *testing.T) {
	const good = `{"n":"precipitation","u":"mm","v":1}`
	for _, c := range []struct {
		record string
		code   Code
		field  string
		says   string
	}{
		{`{"n":"rain","u":"mm","v":1}`, UnknownQuantity, "n", `did you mean "precipitation"?`},
		{`{"n":"precipitation:5","u":"mm","v":1}`, UnknownQuantity, "n", "takes no depth"},
		{`{"n":"` + strings.Repeat("x", 5000) + `","u":"mm","v":1}`, UnknownQuantity, "n", `xxx"...`},
		{`{"n":"precipitation","v":1}`, UnknownUnit, "u", "unit missing: want mm"},
		{`{"n":"precipitation","u":"Pa","v":1}`, UnknownUnit, "u", `unit "Pa" does not fit precipitation: want one of mm`},
		{`{"n":"precipitation","u":"mm","v":"1"}`, BadValue, "v", "numbers stand without quotes"},
		{`{"n":"precipitation","u":"mm","v":null}`, BadValue, "v", "not a number"},
		{`{"n":"precipitation","u":"mm","v":1e999}`, BadValue, "v", "too large"},
		{`{"n":"precipitation","u":"m","v":1e307}`, BadValue, "v", "too large"},
		{`{"n":"precipitation","u":"mm"}`, BadValue, "v", "no value"},
		{`{"n":"precipitation","u":"mm","v":1,"vs":"1"}`, BadValue, "vs", "several"},
		{`{"n":"precipitation","u":"mm","s":12}`, BadValue, "s", "only a sum"},
		{`{"n":"precipitation","vs":"much"}`, NotNumber, "v", "send a number"},
		{`{"n":"precipitation","vb":true}`, NotNumber, "v", "send a number"},
		{`{"n":"precipitation","vd":"aGkgCg"}`, NotNumber, "v", "send a number"},
		{`{"n":"precipitation","vd":"a+/="}`, BadValue, "vd", "base64"},
		{`{"n":"precipitation","vb":1}`, BadValue, "vb", "true or false"},
		{`{"u":"mm","v":1}`, BadName, "n", "letters, digits"},
		{`{"n":"_x","u":"mm","v":1}`, BadName, "n", "a letter or digit first"},
		{`{"n":"pré","u":"mm","v":1}`, BadName, "n", "letters, digits"},
		{`{"n":7,"u":"mm","v":1}`, BadValue, "n", "texts stand in quotes"},
		{`{"n":"precipitation","u":"mm","v":1,"t":1760000000000}`, BadTime, "t", "milliseconds?"},
		{`{"n":"precipitation","u":"mm","v":1,"t":1e300}`, BadTime, "t", "outside the years"},
		{`{"n":"precipitation","u":"mm","v":1,"t":"now"}`, BadValue, "t", "not a number"},
		{`{"n":"precipitation","u":"mm","v":1,"quality_":3}`, BadVersion, `"quality_"`, "must be understood"},
	} {
		got, problems := DecodeSenML([]byte("["+good+","+c.record+","+good+"]"), gauge)
		if len(got) != 2 || len(problems) != 1 {
			t.Errorf("%.80s: %d observations, problems %v; want 2 and one", c.record, len(got), problems)
			continue
		}
		p := problems[0]
		if p.Record != 2 || p.Code != c.code || p.Field != c.field || !strings.Contains(p.Reason, c.says) || !strings.HasPrefix(p.Error(), "record 2: "+c.field) || len(p.Error()) > 400 {
			t.Errorf("%.80s: %+v\n%v\nwant code %s, field %s, saying %q", c.record, p, p, c.code, c.field, c.says)
		}
	}
	_, problems := DecodeSenML([]byte(`[{"n":"precipitation","u":"mm/h","v":1}]`), SenMLOptions{Received: received})
	if len(problems) != 1 || problems[0].Code != NoInterval {
		t.Errorf("a rate without an interval: %v", problems)
	}
}

// What casts doubt on the whole pack refuses it whole (reliability case 25).
func TestHostilePacks(t *testing.T) {
	const good = `{"n":"precipitation","u":"mm","v":1}`
	deep := func(n int) string {
		return `[{"n":"precipitation","u":"mm","v":1,"x":` + strings.Repeat("[", n-2) + strings.Repeat("]", n-2) + `}]`
	}
	var many strings.Builder
	for i := range 65 {
		fmt.Fprintf(&many, `"x%d":1,`, i)
	}
	for _, c := range []struct {
		pack string
		code Code
		at   int // byte named, 0 to leave open
		says string
	}{
		{`[` + good + `,` + `{"n":"x","vs":"` + strings.Repeat("y", 64<<10) + `"}]`, TooLarge, 0, "send at most 65536"},
		{deep(17), TooLarge, 55, "nested more than 16"},
		{strings.Repeat("[", 5000) + strings.Repeat("]", 5000), Unreadable, 1, "not an object"},
		{strings.Repeat("[", 20000), Unreadable, 0, "not JSON"},
		{`[{` + many.String() + `"n":"x","v":1}]`, TooLarge, 0, "more than 64 labels"},
		{``, Unreadable, 0, "not JSON"},
		{`[`, Unreadable, 0, "not JSON"},
		{`[]`, Unreadable, 0, "empty"},
		{`{"n":"precipitation","u":"mm","v":1}`, Unreadable, 0, "array of records"},
		{`[` + good + `,7]`, Unreadable, 38, "record 2 is not an object"},
		{`[` + good + `] x`, Unreadable, 39, "not JSON"},
		{`[` + good + `][` + good + `]`, Unreadable, 38, "not JSON"},
		{`[` + good + `,]`, Unreadable, 38, "not JSON"},
		{`[{"n":"precipitation","u":"mm","v":NaN}]`, Unreadable, 35, "not JSON"},
		{`[{"n":"precipitation","u":"mm","v":-Infinity}]`, Unreadable, 0, "not JSON"},
		{`[{"n":"precipitation","u":"mm","v":01}]`, Unreadable, 36, "not JSON"},
		{"[{\"n\":\"precip\xff\"}]", Unreadable, 13, "not UTF-8"},
		{"[{\"n\":\"precip\x00\"}]", Unreadable, 13, "not JSON"},
		{`[{"n":"precip\u0000"}]`, Unreadable, 13, "NUL"},
		{"\xff\xfe[\x00]\x00", Unreadable, 0, "not UTF-8"},
		{`[{"n":"precipitation","u":"mm","v":1,"v":2}]`, DuplicateKey, 37, `"v": comes twice`},
		{`[{"n":"precipitation","u":"mm","v":1,"\u0076":2}]`, DuplicateKey, 37, `"v": comes twice`},
		{`[{"n":"precipitation","u":"mm","V":1}]`, DuplicateKey, 31, "only in letter case"},
		{`[{"n":"precipitation","u":"mm","v":1,"V":2}]`, DuplicateKey, 37, "only in letter case"},
		{`[{"n":"precipitation","u":"mm","v":1,"VS":"2"}]`, DuplicateKey, 37, "only in letter case"},
		{`[{"n":"precipitation","u":"mm","v":1,"x":{"a":1,"A":2}}]`, DuplicateKey, 48, "only in letter case"},
		{`[{"n":"precipitation","u":"mm","v":1,"\u017f":2}]`, DuplicateKey, 37, "only in letter case"}, // long s folds to s
		{`[{"bver":11,"n":"precipitation","u":"mm","v":1}]`, BadVersion, 2, "version 11 is not known"},
		{`[{"bver":2.5,"n":"precipitation","u":"mm","v":1}]`, BadVersion, 2, "whole number"},
		{`[{"bver":"10","n":"precipitation","u":"mm","v":1}]`, BadValue, 2, "not a number"},
		{`[` + good + `,{"bver":5}]`, BadVersion, 39, "record 2 has version 5, the pack began with 10"},
		{`[{"bquality_":1},` + good + `]`, BadVersion, 2, "must be understood"},
		{`[` + good + `,{"bt":"noon"},` + good + `]`, BadValue, 39, "record 2 and holds for what follows"},
		{`[{"bn":null},` + good + `]`, BadValue, 2, "whole pack is refused"},
	} {
		got, problems := DecodeSenML([]byte(c.pack), gauge)
		if len(got) != 0 || len(problems) != 1 {
			t.Errorf("%.60s: %d observations, problems %v; want none and one", c.pack, len(got), problems)
			continue
		}
		p := problems[0]
		if p.Record != 0 || p.Code != c.code || c.at != 0 && p.Byte != c.at || !strings.Contains(p.Error(), c.says) || len(p.Error()) > 400 {
			t.Errorf("%.60s: %+v\n%v\nwant code %s at byte %d, saying %q", c.pack, p, p, c.code, c.at, c.says)
		}
	}
	if _, problems := DecodeSenML([]byte(deep(16)), gauge); len(problems) > 0 {
		t.Errorf("16 deep is allowed: %v", problems)
	}
}

// A pack too large is refused before anything is made of it.
func TestTooLargeCostsNothing(t *testing.T) {
	big := []byte(`[{"n":"x","vs":"` + strings.Repeat("y", 8<<20) + `"}]`)
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	_, problems := DecodeSenML(big, gauge)
	runtime.ReadMemStats(&after)
	if len(problems) != 1 || problems[0].Code != TooLarge {
		t.Errorf("%d bytes: %v, want code %s", len(big), problems, TooLarge)
	}
	if spent := after.TotalAlloc - before.TotalAlloc; spent > MaxSenML {
		t.Errorf("%d bytes are allocated to refuse %d", spent, len(big))
	}
}

// anyObservation draws an observation that SenML can carry: a decimal of at
// most 15 digits within the gross range.
func anyObservation(t *rapid.T, source string, interval time.Duration) observation.Observation {
	q := rapid.SampledFrom(quantity.Names()).Draw(t, "quantity")
	info, _ := q.Info()
	if info.HasDepth && rapid.Bool().Draw(t, "with depth") {
		q = quantity.Quantity(fmt.Sprintf("%s:%d", q, rapid.IntRange(0, 10000).Draw(t, "depth")))
	}
	v := rapid.Float64Range(info.Lo, info.Hi).Draw(t, "value")
	if wire := wireUnit[info.Unit]; wire != info.Unit && slices.Contains([]string{"Pa", "m", "mm/h"}, wire) {
		v = decimal(t, fmt.Sprintf("%.14e", v)) // 15 digits
	}
	end := time.UnixMicro(rapid.Int64Range(absoluteFrom*1e6, 7e15).Draw(t, "end")).UTC()
	return observation.Observation{
		Source: source, Quantity: q, Start: end.Add(-interval), End: end,
		Value: v, SD: math.NaN(), Flag: observation.NotEvaluated,
	}
}

func decimal(t *rapid.T, s string) float64 {
	var v float64
	if err := json.Unmarshal([]byte(s), &v); err != nil {
		t.Fatal(err)
	}
	return v
}

func TestSenMLRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		interval := time.Duration(rapid.Int64Range(0, 48*3600).Draw(t, "seconds")) * time.Second
		n := rapid.IntRange(1, 20).Draw(t, "records")
		var list []observation.Observation
		for range n {
			list = append(list, anyObservation(t, "hollow-gauge", interval))
		}
		data, err := EncodeSenML(list)
		if err != nil {
			t.Fatal(err)
		}
		got, problems := DecodeSenML(data, SenMLOptions{Source: "hollow-gauge", Received: received, Interval: interval})
		if len(problems) > 0 {
			t.Fatal(problems)
		}
		if d := cmp.Diff(list, got, cmpopts.EquateNaNs()); d != "" {
			t.Fatalf("%s\n%s", data, d)
		}
	})
}

func TestEncodeSenMLRefuses(t *testing.T) {
	end := time.Unix(1760000000, 0).UTC()
	good := observation.Observation{Source: "hollow-gauge", Quantity: quantity.Precipitation, Start: end.Add(-time.Hour), End: end, Value: 1, SD: math.NaN(), Flag: observation.Pass}
	with := func(change func(*observation.Observation)) observation.Observation {
		o := good
		change(&o)
		return o
	}
	for _, c := range []struct {
		list []observation.Observation
		says string
	}{
		{nil, "at least one record"},
		{[]observation.Observation{good, with(func(o *observation.Observation) { o.Source = "other" })}, "one source"},
		{[]observation.Observation{good, with(func(o *observation.Observation) { o.Start = end })}, "one interval"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.WholeDays = true })}, "give instants"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.Value = math.NaN() })}, "no JSON number"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.Flag = observation.Fail })}, "no place for flag 4"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.SD = 0.1 })}, "no place for"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.End, o.Start = time.Unix(0, 0), time.Unix(-3600, 0) })}, "relative time"},
		{[]observation.Observation{with(func(o *observation.Observation) {
			o.End, o.Start = o.End.Add(time.Nanosecond), o.Start.Add(time.Nanosecond)
		})}, "finer than a microsecond"},
		{[]observation.Observation{with(func(o *observation.Observation) { o.Quantity = "rain" })}, "unknown quantity"},
	} {
		if _, err := EncodeSenML(c.list); err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%v: %v, want an error saying %q", c.list, err, c.says)
		}
	}
	_, err := EncodeSenML(slices.Repeat([]observation.Observation{good}, 2000))
	var p *Problem
	if !errors.As(err, &p) || p.Code != TooLarge {
		t.Errorf("2000 records: %v, want code %s", err, TooLarge)
	}
}

func FuzzDecodeSenML(f *testing.F) {
	for _, s := range []string{
		`[{"n":"precipitation","u":"mm","v":1.5,"t":1760000000}]`,
		`[{"bn":"soil_water_","bt":-60,"bu":"Pa","bver":10},{"n":"potential:30","v":-1e5,"t":-0.5},{"n":"content","u":"/","v":0.2}]`,
		`[{"n":"ndvi","u":"1","vs":"x"},{"n":"evi","vb":true},{"n":"a","vd":"aGkgCg"},{"n":"b","s":1}]`,
		`[{"n":"wind_speed","u":"km/h","v":1e999,"x_":{"a":[[],{}]}}]`,
		`[{"N":"x","\u006e":"\u0000\"\\"}]`, `[[[[`, `{}`, "[{\"\xff\":1}]", `[{"bv":1e308,"n":"lai","u":"1","v":1e308}]`, ` [ { } ] `,
	} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		list, problems := DecodeSenML(data, gauge)
		for _, o := range list {
			if math.IsNaN(o.Value) || math.IsInf(o.Value, 0) || !inRange(o.End) || o.Start.After(o.End) {
				t.Errorf("%s: impossible observation %+v", data, o)
			}
			if _, ok := o.Quantity.Info(); !ok {
				t.Errorf("%s: unknown quantity %q", data, o.Quantity)
			}
		}
		refused := len(problems) == 1 && problems[0].Record == 0
		if refused && len(list) > 0 {
			t.Errorf("%s: refused whole, yet %d observations", data, len(list))
		}
		// Every record that holds more than base fields is accounted for.
		var pack []map[string]json.RawMessage
		if err := json.Unmarshal(data, &pack); refused || err != nil {
			if !refused {
				t.Errorf("%s: not refused, though %v", data, err)
			}
			return
		}
		speaking := 0
		for _, record := range pack {
			for label := range record {
				if slices.Contains(knownLabels[6:], label) || mustUnderstand(label) && !strings.HasPrefix(label, "b") {
					speaking++
					break
				}
			}
		}
		if speaking != len(list)+len(problems) {
			t.Errorf("%s: %d records speak, %d observations and %d problems", data, speaking, len(list), len(problems))
		}
	})
}

func BenchmarkDecodeSenML(b *testing.B) {
	var list []observation.Observation
	for i := range 500 {
		end := time.Unix(1760000000+600*int64(i), 0).UTC()
		q := []quantity.Quantity{quantity.Precipitation, quantity.AirTemperature, quantity.StemWaterPotential, "soil_water_content:30"}[i%4]
		list = append(list, observation.Observation{Source: "hollow-gauge", Quantity: q, Start: end.Add(-time.Hour), End: end, Value: -0.01 * float64(i), SD: math.NaN(), Flag: observation.NotEvaluated})
	}
	data, err := EncodeSenML(list)
	if err != nil {
		b.Fatal(err)
	}
	b.SetBytes(int64(len(data)))
	b.ReportAllocs()
	for b.Loop() {
		if got, problems := DecodeSenML(data, gauge); len(got) != len(list) {
			b.Fatal(problems)
		}
	}
	b.ReportMetric(float64(len(list))*float64(b.N)/b.Elapsed().Seconds(), "records/s")
}

// Design 5.2: a source may say the unit of values that come without one; a
// record's own unit goes first.
func TestUnitOfTheSource(t *testing.T) {
	pack := []byte(`[{"bt":1320067464,"n":"precipitation","v":2},{"n":"precipitation","u":"mm","t":1,"v":3}]`)
	list, problems := DecodeSenML(pack, SenMLOptions{Source: "gauge", Unit: "cm"})
	if len(problems) != 0 || len(list) != 2 || list[0].Value != 20 || list[1].Value != 3 {
		t.Errorf("%+v, %v", list, problems)
	}
	if _, problems := DecodeSenML(pack, SenMLOptions{Source: "gauge"}); len(problems) != 1 || problems[0].Code != UnknownUnit {
		t.Errorf("without a unit: %v", problems)
	}
}
