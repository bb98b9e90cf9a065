package wire

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"math"
	"strings"
	"testing"
	"testing/iotest"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"pgregory.net/rapid"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

const header = "source,quantity,start,end,value,unit,sd,flag,available\n"

// readAll reads a whole file; a mistake in the header is a problem too.
func readAll(t testing.TB, r io.Reader) (list []observation.Observation, problems []*Problem) {
	t.Helper()
	c, err := NewCSVReader(r, "history.csv")
	for err == nil {
		var o observation.Observation
		if o, err = c.Next(); err == nil {
			list = append(list, o)
			continue
		}
		var p *Problem
		if errors.As(err, &p) {
			problems, err = append(problems, p), nil
		}
	}
	var p *Problem
	if errors.As(err, &p) {
		problems = append(problems, p)
	} else if err != io.EOF {
		t.Fatal(err)
	}
	return list, problems
}

// Design 5.3, clause by clause.
func TestCSV(t *testing.T) {
	july := func(day, hour, minute int) time.Time {
		return time.Date(2016, time.July, day, hour, minute, 0, 0, time.UTC)
	}
	nan := math.NaN()
	got, problems := readAll(t, strings.NewReader("\ufeff"+strings.ReplaceAll(header+
		`ridge,precipitation,2016-07-01,,12.5,mm,,,
ridge,precipitation,2016-07-01,2016-07-03,12.5,mm,0.5,1,
ridge,precipitation,2016-07-01T06:00:00+02:00,2016-07-01T07:00:00+02:00,2.4,mm/h,0.6,2,2016-07-01T05:10:00Z
ridge,air_temperature,2016-07-01T06:00:00Z,,293.15,K,0.5,3,
ridge,air_temperature,2016-07-01T06:00:00.25Z,2016-07-01T06:00:00.25Z,68,degF,0.9,4,
ridge,soil_water_potential:30,2016-07-01,,-1.2e6,Pa,,,2016-07-05
ridge,precipitation,2016-07-02,,,mm,,9,
ridge,precipitation,2016-07-03,,,,,9,

"ridge","solar_radiation", 2016-07-01 ,,"21.6",MJ/m2 ,,,
ridge,precipitation,2016-07-04,,.5,mm,,,`, "\n", "\r\n")))
	for _, p := range problems {
		t.Error(p)
	}
	const notEvaluated = observation.NotEvaluated
	quarter := july(1, 6, 0).Add(250 * time.Millisecond)
	want := []observation.Observation{
		{Quantity: "precipitation", Start: july(1, 0, 0), End: july(2, 0, 0), WholeDays: true, Value: 12.5, SD: nan, Flag: notEvaluated},
		{Quantity: "precipitation", Start: july(1, 0, 0), End: july(3, 0, 0), WholeDays: true, Value: 12.5, SD: 0.5, Flag: observation.Pass},
		{Quantity: "precipitation", Start: july(1, 4, 0), End: july(1, 5, 0), Value: 2.4, SD: 0.6, Flag: notEvaluated, Available: july(1, 5, 10)},
		{Quantity: "air_temperature", Start: july(1, 6, 0), End: july(1, 6, 0), Value: 20, SD: 0.5, Flag: observation.Suspect},
		{Quantity: "air_temperature", Start: quarter, End: quarter, Value: 20, SD: 0.5, Flag: observation.Fail},
		{Quantity: "soil_water_potential:30", Start: july(1, 0, 0), End: july(2, 0, 0), WholeDays: true, Value: -1.2, SD: nan, Flag: notEvaluated, Available: july(6, 0, 0)},
		{Quantity: "precipitation", Start: july(2, 0, 0), End: july(3, 0, 0), WholeDays: true, Value: nan, SD: nan, Flag: observation.Missing},
		{Quantity: "precipitation", Start: july(3, 0, 0), End: july(4, 0, 0), WholeDays: true, Value: nan, SD: nan, Flag: observation.Missing},
		{Quantity: "solar_radiation", Start: july(1, 0, 0), End: july(2, 0, 0), WholeDays: true, Value: 250, SD: nan, Flag: notEvaluated}, // 21.6e6 J in 86400 s
		{Quantity: "precipitation", Start: july(4, 0, 0), End: july(5, 0, 0), WholeDays: true, Value: 0.5, SD: nan, Flag: notEvaluated},
	}
	for i := range want {
		want[i].Source = "ridge"
	}
	if d := cmp.Diff(want, got, cmpopts.EquateNaNs()); d != "" {
		t.Error(d)
	}
}

func TestCSVColumnsInAnyOrder(t *testing.T) {
	got, problems := readAll(t, strings.NewReader("unit,value,start,quantity,source\nmm,3,2016-07-01,precipitation,ridge\n"))
	if len(problems) > 0 || len(got) != 1 || got[0].Value != 3 || got[0].Source != "ridge" || got[0].Flag != observation.NotEvaluated || !got[0].Available.IsZero() {
		t.Errorf("%+v %v", got, problems)
	}
}

func TestCSVHeader(t *testing.T) {
	for _, c := range []struct {
		in   string
		code Code
		says string
	}{
		{"", Unreadable, "the file is empty"},
		{"source,quantity,start,value,unit,colour\n", BadColumn, `unknown column "colour"`},
		{"Source,quantity,start,value,unit\n", BadColumn, `unknown column "Source", column "source" is missing`},
		{"station,date,rain\n", BadColumn, `unknown column "station", unknown column "date", unknown column "rain", column "source" is missing, column "quantity" is missing, column "start" is missing, column "value" is missing, column "unit" is missing; want source,quantity`},
		{"source,quantity,start,value,unit,value\n", DuplicateKey, `column "value" comes twice`},
		{"source;quantity;start;value;unit\n", Unreadable, "commas"},
		{"s\x00o\x00u\x00r\x00c\x00e\x00\n", Unreadable, "NUL"},
		{"\xff\xfes\x00\n", Unreadable, "not UTF-8"},
		{strings.Repeat(",", 70_000) + "\n", TooLarge, "longer than 65536"},
		{strings.Repeat(",", 60_000) + "\n", BadColumn, `unknown column ""`},
	} {
		_, err := NewCSVReader(strings.NewReader(c.in), "history.csv")
		var p *Problem
		if !errors.As(err, &p) || p.Code != c.code || !strings.Contains(p.Error(), c.says) || !strings.HasPrefix(p.Error(), "history.csv: ") || len(p.Error()) > 500 {
			t.Errorf("%.60q: %v, want code %s saying %q", c.in, err, c.code, c.says)
		}
	}
}

// Every row between two good ones is told, with its line, and spoils neither.
func TestCSVBadRows(t *testing.T) {
	const good = "ridge,precipitation,2016-07-01,,1,mm,,,\n"
	for _, c := range []struct {
		row   string
		code  Code
		field string
		says  string
	}{
		{"ridge,precipitation,2016-07-01,,1,mm", Unreadable, "", "has 6 fields, the header has 9"},
		{"ridge,precipitation,2016-07-01,,1,5,mm,,,", Unreadable, "", "decimal comma"},
		{`ridge,"precipitation,2016-07-01,,1,mm,,,`, Unreadable, "", "quote"},
		{`ridge,preci"pitation,2016-07-01,,1,mm,,,`, Unreadable, "", "quote"},
		{"ridge,precipitation,2016-07-01,,1,mm,,,\xff", Unreadable, "", "not UTF-8"},
		{"ridge,precipitation,2016-07-01,,1\x00,mm,,,", Unreadable, "", "NUL"},
		{strings.Repeat("x", 200_000), TooLarge, "", "a row is one line"},
		{",precipitation,2016-07-01,,1,mm,,,", BadSource, "source", "the id is empty"},
		{"Ridge Top,precipitation,2016-07-01,,1,mm,,,", BadSource, "source", `contains 'R'`},
		{"../ridge,precipitation,2016-07-01,,1,mm,,,", BadSource, "source", `contains '.'`},
		{"=cmd,precipitation,2016-07-01,,1,mm,,,", BadSource, "source", `contains '='`},
		{"ridge,rainfall,2016-07-01,,1,mm,,,", UnknownQuantity, "quantity", `did you mean "precipitation"?`},
		{"ridge,precipitation:3,2016-07-01,,1,mm,,,", UnknownQuantity, "quantity", "takes no depth"},
		{"ridge,precipitation,,,1,mm,,,", BadTime, "start", "neither an instant nor a date"},
		{"ridge,precipitation,2016-02-30,,1,mm,,,", BadTime, "start", "not a date"},
		{"ridge,precipitation,01.07.2016,,1,mm,,,", BadTime, "start", "not a date"},
		{"ridge,precipitation,2016-07-01T06:00:00,,1,mm,,,", BadTime, "start", "no offset from UTC"},
		{"ridge,precipitation,2016-07-01 06:00:00Z,,1,mm,,,", BadTime, "start", "neither"},
		{"ridge,precipitation,0216-07-01,,1,mm,,,", BadTime, "start", "outside the years"},
		{"ridge,precipitation,2016-07-01,2016-07-01T12:00:00Z,1,mm,,,", BadTime, "end", "both be dates"},
		{"ridge,precipitation,2016-07-01T12:00:00Z,2016-07-02,1,mm,,,", BadTime, "end", "both be dates"},
		{"ridge,precipitation,2016-07-01,2016-07-01,1,mm,,,", BadTime, "end", "exclusive"},
		{"ridge,precipitation,2016-07-02,2016-07-01,1,mm,,,", BadTime, "end", "before it starts"},
		{"ridge,precipitation,2016-07-01,soon,1,mm,,,", BadTime, "end", "neither"},
		{"ridge,precipitation,2016-07-01,,,mm,,,", BadValue, "value", "flag 9 for known missing"},
		{"ridge,precipitation,2016-07-01,,NaN,mm,,,", BadValue, "value", "not a number"},
		{"ridge,precipitation,2016-07-01,,Inf,mm,,,", BadValue, "value", "not a number"},
		{"ridge,precipitation,2016-07-01,,0x1p3,mm,,,", BadValue, "value", "not a number"},
		{"ridge,precipitation,2016-07-01,,1e999,mm,,,", BadValue, "value", "too large"},
		{"ridge,precipitation,2016-07-01,,1e307,m,,,", BadValue, "value", "too large"},
		{"ridge,precipitation,2016-07-01,,1-2,mm,,,", BadValue, "value", "not a number"},
		{`ridge,precipitation,2016-07-01,,"1,5",mm,,,`, BadValue, "value", "not a number"},
		{"ridge,precipitation,2016-07-01,,1,,,,", UnknownUnit, "unit", "unit missing: want mm"},
		{"ridge,precipitation,2016-07-01,,1,degC,,,", UnknownUnit, "unit", "want one of mm"},
		{"ridge,precipitation,2016-07-01T06:00:00Z,,1,mm/h,,,", NoInterval, "unit", "give start and end"},
		{"ridge,precipitation,2016-07-01,,1,mm,-1,,", BadValue, "sd", "negative"},
		{"ridge,precipitation,2016-07-01,,1,mm,x,,", BadValue, "sd", "not a number"},
		{"ridge,precipitation,2016-07-01,,,mm,1,9,", BadValue, "sd", "no value for it"},
		{"ridge,precipitation,2016-07-01,,1,mm,,9,", BadFlag, "flag", "flag 9 says missing"},
		{"ridge,precipitation,2016-07-01,,1,mm,,5,", BadFlag, "flag", "want 1 pass"},
		{"ridge,precipitation,2016-07-01,,1,mm,,good,", BadFlag, "flag", "want 1 pass"},
		{"ridge,precipitation,2016-07-01,,1,mm,,,later", BadTime, "available", "neither"},
		{"ridge,precipitation,2016-07-01,,1,mm,,,2016-06-01", BadTime, "available", "nothing is known before"},
		{"ridge,precipitation,2016-07-01T06:00:00Z,,1,mm,,,2016-07-01T05:59:59Z", BadTime, "available", "nothing is known before"},
	} {
		got, problems := readAll(t, strings.NewReader(header+good+c.row+"\n"+good))
		if len(got) != 2 || len(problems) != 1 {
			t.Errorf("%.80q: %d observations, problems %v; want 2 and one", c.row, len(got), problems)
			continue
		}
		p := problems[0]
		want := "history.csv: line 3: "
		if c.field != "" {
			want += c.field + ": "
		}
		if p.Line != 3 || p.Code != c.code || p.Field != c.field || !strings.Contains(p.Reason, c.says) || !strings.HasPrefix(p.Error(), want) || len(p.Error()) > 500 {
			t.Errorf("%.80q: %+v\n%v\nwant code %s, field %q, saying %q", c.row, p, p, c.code, c.field, c.says)
		}
	}
}

func TestCSVReadFailureEndsReading(t *testing.T) {
	broken := errors.New("disk gone")
	c, err := NewCSVReader(io.MultiReader(strings.NewReader(header), iotest.ErrReader(broken)), "history.csv")
	if err != nil {
		t.Fatal(err)
	}
	for range 2 {
		if _, err := c.Next(); !errors.Is(err, broken) || !strings.Contains(err.Error(), "history.csv after line 1") {
			t.Errorf("%v, want %v", err, broken)
		}
	}
}

// anyRow draws whatever CSV can hold.
func anyRow(t *rapid.T) observation.Observation {
	o := observation.Observation{
		Source:    rapid.StringMatching(`[a-z0-9][a-z0-9_-]{0,63}`).Draw(t, "source"),
		Quantity:  rapid.SampledFrom(quantity.Names()).Draw(t, "quantity"),
		WholeDays: rapid.Bool().Draw(t, "dates"),
		Value:     math.NaN(), SD: math.NaN(),
		Flag: rapid.SampledFrom([]observation.Flag{1, 2, 3, 4, 9}).Draw(t, "flag"),
	}
	const from, to = -5_000_000_000, 7_000_000_000 // 1811 to 2191
	if o.WholeDays {
		day := quantity.Day(rapid.Int64Range(from/86400, to/86400).Draw(t, "day"))
		o.Start, o.End = day.Start(0), (day + quantity.Day(rapid.IntRange(1, 40).Draw(t, "days"))).Start(0)
	} else {
		o.Start = time.Unix(rapid.Int64Range(from, to).Draw(t, "start"), rapid.Int64Range(0, 999_999_999).Draw(t, "nano")).UTC()
		o.End = o.Start.Add(time.Duration(rapid.Int64Range(0, int64(1000*time.Hour)).Draw(t, "span")))
	}
	finite := rapid.Float64().Filter(func(v float64) bool { return !math.IsInf(v, 0) && !math.IsNaN(v) })
	if o.Flag != observation.Missing {
		o.Value = finite.Draw(t, "value")
		if rapid.Bool().Draw(t, "with sd") {
			o.SD = math.Abs(finite.Draw(t, "sd"))
		}
	}
	if rapid.Bool().Draw(t, "with available") {
		o.Available = o.Start.Add(time.Duration(rapid.Int64Range(0, int64(1e16)).Draw(t, "later")))
	}
	return o
}

func TestCSVRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		list := rapid.SliceOfN(rapid.Custom(anyRow), 0, 20).Draw(t, "rows")
		var buf bytes.Buffer
		w := NewCSVWriter(&buf)
		for _, o := range list {
			if err := w.Write(o); err != nil {
				t.Fatal(err)
			}
		}
		if err := w.Flush(); err != nil {
			t.Fatal(err)
		}
		text := buf.String()
		got, problems := readRapid(t, &buf)
		if len(problems) > 0 {
			t.Fatalf("%v\n%s", problems, text)
		}
		if d := cmp.Diff(list, got, cmpopts.EquateEmpty(), cmp.Comparer(sameBits)); d != "" {
			t.Fatalf("%s\n%s", text, d)
		}
	})
}

// sameBits tells -0 from 0, and takes every NaN for "unknown".
func sameBits(a, b float64) bool {
	return math.Float64bits(a) == math.Float64bits(b) || math.IsNaN(a) && math.IsNaN(b)
}

func readRapid(t *rapid.T, r io.Reader) (list []observation.Observation, problems []error) {
	c, err := NewCSVReader(r, "history.csv")
	if err != nil {
		t.Fatal(err)
	}
	for {
		o, err := c.Next()
		switch {
		case err == io.EOF:
			return list, problems
		case err != nil:
			problems = append(problems, err)
		default:
			list = append(list, o)
		}
	}
}

func TestCSVWriterRefuses(t *testing.T) {
	day := quantity.DateOf(2016, time.July, 1)
	good := observation.Observation{Source: "ridge", Quantity: quantity.Precipitation, Start: day.Start(0), End: day.End(0), WholeDays: true, Value: 1, SD: math.NaN(), Flag: observation.Pass}
	for says, change := range map[string]func(*observation.Observation){
		"the id":           func(o *observation.Observation) { o.Source = "=1+1" },
		"unknown quantity": func(o *observation.Observation) { o.Quantity = "rain" },
		"QARTOD":           func(o *observation.Observation) { o.Flag = 0 },
		"does not go with": func(o *observation.Observation) { o.Value = math.NaN() },
		"go with flag 9":   func(o *observation.Observation) { o.Flag = observation.Missing },
		"cannot be":        func(o *observation.Observation) { o.SD = -1 },
		"outside":          func(o *observation.Observation) { o.Start = time.Time{} },
		"no interval":      func(o *observation.Observation) { o.End = o.Start.Add(-time.Hour) },
		"is no interval":   func(o *observation.Observation) { o.Start = o.Start.Add(time.Hour) },
	} {
		var buf bytes.Buffer
		w := NewCSVWriter(&buf)
		bad := good
		change(&bad)
		if err := w.Write(bad); err == nil || !strings.Contains(err.Error(), says) {
			t.Errorf("%+v: %v, want an error saying %q", bad, err, says)
		}
		if err := errors.Join(w.Write(good), w.Flush()); err != nil || buf.String() != header+"ridge,precipitation,2016-07-01,,1,mm,,1,\n" {
			t.Errorf("after a refusal: %v, %q", err, buf.String())
		}
	}
}

func FuzzCSVReader(f *testing.F) {
	for _, s := range []string{
		"ridge,precipitation,2016-07-01,,12.5,mm,,,\n",
		"ridge,air_temperature,2016-07-01T06:00:00Z,,293.15,K,0.5,3,2016-07-02\r\n\nridge,precipitation,2016-07-02,,,mm,,9,",
		"\"ridge\",\"precipi\"\"tation\",,,,,,,\n\"", "a,b\n,,,,,,,,\n", "\xff\n\x00\n", "ridge,soil_water_potential:30,2016-07-01,2016-07-03,-1e300,bar,1e300,1,\n",
	} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, rows []byte) {
		list, problems := readAll(t, io.MultiReader(strings.NewReader(header), bytes.NewReader(rows)))
		lines := 0 // that are not empty
		for line := range bytes.SplitSeq(rows, []byte("\n")) {
			if len(bytes.TrimSuffix(line, []byte("\r"))) > 0 {
				lines++
			}
		}
		if lines != len(list)+len(problems) {
			t.Errorf("%q: %d lines, %d observations and %d problems", rows, lines, len(list), len(problems))
		}
		var buf bytes.Buffer
		w := NewCSVWriter(&buf)
		for _, o := range list {
			if err := w.Write(o); err != nil {
				t.Fatalf("%q: read, but cannot be written: %v", rows, err)
			}
		}
		if err := w.Flush(); err != nil {
			t.Fatal(err)
		}
		again, problems := readAll(t, &buf)
		if d := cmp.Diff(list, again, cmpopts.EquateNaNs()); d != "" || len(problems) > 0 {
			t.Errorf("%q: not the same again: %v %s", rows, problems, d)
		}
	})
}

func benchmarkFile(rows int) []byte {
	b := []byte(header)
	for i := range rows {
		day := quantity.Day(i / 4 % 20000)
		switch i % 4 {
		case 0:
			b = fmt.Appendf(b, "ridge-gauge,precipitation,%s,,%.1f,mm,,,\n", day, float64(i%300)/10)
		case 1:
			b = fmt.Appendf(b, "ridge-mast,air_temperature_max,%s,,%.1f,degC,0.3,1,\n", day, float64(i%400)/10-5)
		case 2:
			b = fmt.Appendf(b, "ridge-mast,air_temperature,%sT06:00:00Z,%sT07:00:00Z,%.2f,K,,2,\n", day, day, 270+float64(i%4000)/100)
		case 3:
			b = fmt.Appendf(b, "ridge-stem,soil_water_potential:30,%s,,%d,Pa,,1,%s\n", day, -1000*(i%3000), day+1)
		}
	}
	return b
}

func BenchmarkCSVReader(b *testing.B) {
	const rows = 10_000
	data := benchmarkFile(rows)
	b.SetBytes(int64(len(data)))
	b.ReportAllocs()
	for b.Loop() {
		c, err := NewCSVReader(bytes.NewReader(data), "history.csv")
		if err != nil {
			b.Fatal(err)
		}
		for n := 0; ; n++ {
			if _, err := c.Next(); err == io.EOF && n == rows {
				break
			} else if err != nil {
				b.Fatal(err)
			}
		}
	}
	b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

func BenchmarkCSVWriter(b *testing.B) {
	list, _ := readAll(b, bytes.NewReader(benchmarkFile(1000)))
	b.ReportAllocs()
	for b.Loop() {
		w := NewCSVWriter(io.Discard)
		for _, o := range list {
			if err := w.Write(o); err != nil {
				b.Fatal(err)
			}
		}
	}
	b.ReportMetric(float64(len(list))*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}
