package wire

import (
	"math"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

// received is when every pack of these tests comes in.
var received = time.Date(2026, time.March, 1, 6, 0, 0, 0, time.UTC)

func seconds(micros int64) time.Time { return time.UnixMicro(micros).UTC() }

func num(name, unit string, micros int64, v float64) Record {
	return Record{Name: name, Unit: unit, Time: seconds(micros), Kind: Number, Number: v, Sum: math.NaN()}
}

// The examples of RFC 8428 (Jennings, Shelby, Arkko, Keranen, Bormann 2018)
// section 5.1 and their resolved form; times of the RFC in microseconds.
func TestRFC8428Examples(t *testing.T) {
	const (
		ow  = "urn:dev:ow:10e2073a01080063"
		ow6 = "urn:dev:ow:10e2073a0108006:"
		now = 0 // stands for received
	)
	for _, c := range []struct {
		section, pack string
		want          []Record
	}{
		{"5.1.1 single datapoint", `[
 {"n":"urn:dev:ow:10e2073a01080063","u":"Cel","v":23.1}
]`, []Record{num(ow, "Cel", now, 23.1)}},

		{"5.1.2 multiple datapoints, now", `[
 {"bn":"urn:dev:ow:10e2073a01080063:","n":"voltage","u":"V","v":120.1},
 {"n":"current","u":"A","v":1.2}
]`, []Record{num(ow+":voltage", "V", now, 120.1), num(ow+":current", "A", now, 1.2)}},

		{"5.1.2 multiple datapoints, base time and version 5", `[
 {"bn":"urn:dev:ow:10e2073a0108006:","bt":1.276020076001e+09,
  "bu":"A","bver":5,
  "n":"voltage","u":"V","v":120.1},
 {"n":"current","t":-5,"v":1.2},
 {"n":"current","t":-4,"v":1.3},
 {"n":"current","t":-3,"v":1.4},
 {"n":"current","t":-2,"v":1.5},
 {"n":"current","t":-1,"v":1.6},
 {"n":"current","v":1.7}
]`, []Record{
			num(ow6+"voltage", "V", 1276020076_001000, 120.1),
			num(ow6+"current", "A", 1276020071_001000, 1.2),
			num(ow6+"current", "A", 1276020072_001000, 1.3),
			num(ow6+"current", "A", 1276020073_001000, 1.4),
			num(ow6+"current", "A", 1276020074_001000, 1.5),
			num(ow6+"current", "A", 1276020075_001000, 1.6),
			num(ow6+"current", "A", 1276020076_001000, 1.7),
		}},

		{"5.1.2 a stream's beginning", `[
 {"bn":"urn:dev:ow:10e2073a01080063","bt":1.320067464e+09,
  "bu":"%RH","v":21.2},
 {"t":10,"v":21.3},
 {"t":20,"v":21.4},
 {"t":30,"v":21.4},
 {"t":40,"v":21.5},
 {"t":50,"v":21.5},
 {"t":60,"v":21.5},
 {"t":70,"v":21.6},
 {"t":80,"v":21.7},
 {"t":90,"v":21.5},
 {"t":91,"v":21.5},
 {"t":92,"v":21.5}
]`, []Record{
			num(ow, "%RH", 1320067464e6, 21.2), num(ow, "%RH", 1320067474e6, 21.3),
			num(ow, "%RH", 1320067484e6, 21.4), num(ow, "%RH", 1320067494e6, 21.4),
			num(ow, "%RH", 1320067504e6, 21.5), num(ow, "%RH", 1320067514e6, 21.5),
			num(ow, "%RH", 1320067524e6, 21.5), num(ow, "%RH", 1320067534e6, 21.6),
			num(ow, "%RH", 1320067544e6, 21.7), num(ow, "%RH", 1320067554e6, 21.5),
			num(ow, "%RH", 1320067555e6, 21.5), num(ow, "%RH", 1320067556e6, 21.5),
		}},

		{"5.1.3 multiple measurements, resolved as in 5.1.4", `[
 {"bn":"urn:dev:ow:10e2073a01080063","bt":1.320067464e+09,
  "bu":"%RH","v":20},
 {"u":"lon","v":24.30621},
 {"u":"lat","v":60.07965},
 {"t":60,"v":20.3},
 {"u":"lon","t":60,"v":24.30622},
 {"u":"lat","t":60,"v":60.07965},
 {"t":120,"v":20.7},
 {"u":"lon","t":120,"v":24.30623},
 {"u":"lat","t":120,"v":60.07966},
 {"u":"%EL","t":150,"v":98},
 {"t":180,"v":21.2},
 {"u":"lon","t":180,"v":24.30628},
 {"u":"lat","t":180,"v":60.07967}
]`, []Record{
			num(ow, "%RH", 1320067464e6, 20), num(ow, "lon", 1320067464e6, 24.30621), num(ow, "lat", 1320067464e6, 60.07965),
			num(ow, "%RH", 1320067524e6, 20.3), num(ow, "lon", 1320067524e6, 24.30622), num(ow, "lat", 1320067524e6, 60.07965),
			num(ow, "%RH", 1320067584e6, 20.7), num(ow, "lon", 1320067584e6, 24.30623), num(ow, "lat", 1320067584e6, 60.07966),
			num(ow, "%EL", 1320067614e6, 98),
			num(ow, "%RH", 1320067644e6, 21.2), num(ow, "lon", 1320067644e6, 24.30628), num(ow, "lat", 1320067644e6, 60.07967),
		}},

		{"5.1.5 multiple data types", `[
 {"bn":"urn:dev:ow:10e2073a01080063:","n":"temp","u":"Cel","v":23.1},
 {"n":"label","vs":"Machine Room"},
 {"n":"open","vb":false},
 {"n":"nfc-reader","vd":"aGkgCg"}
]`, []Record{
			num(ow+":temp", "Cel", now, 23.1),
			{Name: ow + ":label", Kind: Text, Text: "Machine Room", Sum: math.NaN()},
			{Name: ow + ":open", Kind: Bool, Sum: math.NaN()},
			{Name: ow + ":nfc-reader", Kind: Data, Data: []byte{0x68, 0x69, 0x20, 0x0a}, Sum: math.NaN()},
		}},

		{"5.1.6 collection of resources", `[
 {"bn":"2001:db8::2/","bt":1.320078429e+09,
  "n":"temperature","u":"Cel","v":25.2},
 {"n":"humidity","u":"%RH","v":30},
 {"bn":"2001:db8::1/","n":"temperature","u":"Cel","v":12.3},
 {"n":"humidity","u":"%RH","v":67}
]`, []Record{
			num("2001:db8::2/temperature", "Cel", 1320078429e6, 25.2), num("2001:db8::2/humidity", "%RH", 1320078429e6, 30),
			num("2001:db8::1/temperature", "Cel", 1320078429e6, 12.3), num("2001:db8::1/humidity", "%RH", 1320078429e6, 67),
		}},

		{"5.1.7 setting an actuator, a record of base fields alone", `[
 {"bn":"urn:dev:ow:10e2073a01080063:"},
 {"n":"temp","u":"Cel","v":23.1},
 {"n":"heat","u":"/","v":1},
 {"n":"fan","u":"/","v":0}
]`, []Record{num(ow+":temp", "Cel", now, 23.1), num(ow+":heat", "/", now, 1), num(ow+":fan", "/", now, 0)}},

		{"5.1.7 two lights dimmed, then off", `[
 {"bt":1.320078429e+09,"bu":"/","n":"2001:db8::3","v":0.5},
 {"n":"2001:db8::4","v":0.5},
 {"n":"2001:db8::3","t":0.1,"v":0},
 {"n":"2001:db8::4","t":0.1,"v":0}
]`, []Record{
			num("2001:db8::3", "/", 1320078429_000000, 0.5), num("2001:db8::4", "/", 1320078429_000000, 0.5),
			num("2001:db8::3", "/", 1320078429_100000, 0), num("2001:db8::4", "/", 1320078429_100000, 0),
		}},
	} {
		t.Run(c.section, func(t *testing.T) {
			got, problems := Resolve([]byte(c.pack), received)
			if len(problems) > 0 {
				t.Fatal(problems)
			}
			for i := range c.want {
				if c.want[i].Time.IsZero() || c.want[i].Time.Unix() == now {
					c.want[i].Time = received
				}
			}
			if d := cmp.Diff(c.want, got, cmpopts.EquateNaNs(), cmpopts.IgnoreFields(Record{}, "Index")); d != "" {
				t.Error(d)
			}
		})
	}
}

// RFC 8428 section 4.5.3: 2^28 is the smallest absolute time (check value
// senml-time-limit); all below is relative to now.
func TestAbsoluteAndRelativeTime(t *testing.T) {
	for _, c := range []struct {
		pack string
		want time.Time
	}{
		{`[{"n":"a","t":268435456,"v":1}]`, time.Date(1978, time.July, 4, 21, 24, 16, 0, time.UTC)},
		{`[{"n":"a","t":268435455,"v":1}]`, received.Add(268435455 * time.Second)},
		{`[{"n":"a","v":1}]`, received},
		{`[{"n":"a","t":-0.25,"v":1}]`, received.Add(-250 * time.Millisecond)},
		{`[{"bt":-3600,"n":"a","t":60,"v":1}]`, received.Add(-59 * time.Minute)},
		{`[{"bt":1760000000.5,"n":"a","t":0.25,"v":1}]`, time.UnixMilli(1760000000750).UTC()},
	} {
		got, problems := Resolve([]byte(c.pack), received)
		if len(problems) > 0 || len(got) != 1 || !got[0].Time.Equal(c.want) {
			t.Errorf("%s: %v %v, want %s", c.pack, got, problems, c.want)
		}
	}
}

// RFC 8428 section 4.5.4 (sums and base values) and section 4.4 (labels that
// are not known, versions).
func TestBaseFieldsAndVersions(t *testing.T) {
	for _, c := range []struct {
		pack string
		want []Record
	}{
		{`[{"bv":10,"bs":100,"n":"a","v":1},{"n":"a","v":-2,"s":5},{"bv":0,"bs":0,"n":"a","s":7}]`, []Record{
			{Name: "a", Kind: Number, Number: 11, Sum: 100}, {Name: "a", Kind: Number, Number: 8, Sum: 105}, {Name: "a", Sum: 7}}},
		{`[{"bu":"V","n":"a","u":"A","v":1},{"n":"a","v":2}]`, []Record{ // u for one record, bu for the rest
			num("a", "A", 0, 1), num("a", "V", 0, 2)}},
		{`[{"n":"a","v":1,"ut":60,"colour":{"bx":[1,{"v":2}]}}]`, []Record{num("a", "", 0, 1)}},
		{`[{"bver":10,"n":"a","v":1},{"bver":10,"n":"a","v":2}]`, []Record{num("a", "", 0, 1), num("a", "", 0, 2)}},
		{`[{"bver":26,"n":"a","u":"mm","v":1}]`, []Record{num("a", "mm", 0, 1)}}, // RFC 9100
		{`[{"n":"\u0061b","v":1e2}]`, []Record{num("ab", "", 0, 100)}},
	} {
		got, problems := Resolve([]byte(c.pack), received)
		if len(problems) > 0 {
			t.Errorf("%s: %v", c.pack, problems)
		}
		if d := cmp.Diff(c.want, got, cmpopts.EquateNaNs(), cmpopts.IgnoreFields(Record{}, "Index", "Time")); d != "" {
			t.Errorf("%s: %s", c.pack, d)
		}
	}
}
