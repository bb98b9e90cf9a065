package config

import (
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"saprolite/ingest/quantity"
)

func load(t testing.TB, file string) *Register {
	t.Helper()
	r, err := LoadRegister(file)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

func TestRegister(t *testing.T) {
	r := load(t, "testdata/alder.good.geojson")
	slope := *r.Stand("north-slope")
	want := Stand{
		ID: "north-slope", Name: "Alder Hollow, north slope", Line: 5,
		Latitude: 46.205, Longitude: 8.105,
		Elevation: 980, UTCOffset: time.Hour, // 8.1/15 = 0.54, rounded
		Established: 1931, CanopyCover: 0.85, Groups: []string{"Upper Alder", "ridge road"}, Priority: 2,
		StorageLimit: 310, InterceptionStore: 1.8, InterceptionShare: 0.22, ETCoefficient: 0.9,
		TurgorLoss: -2.1, P50: -3.2, P88: -4.1,
		MonthlyReferenceET: &[12]quantity.Millimetres{8, 14, 35, 58, 84, 101, 118, 99, 62, 33, 13, 7},
		ExtraWater:         "none",
		Species:            []Share{{"Fagus sylvatica", 0.6}, {"Abies alba", 0.4}},
		Sources:            map[quantity.Quantity][]string{"precipitation": {"gauge-2", "gauge-1"}, "soil_water_content:30": {"probe-7"}},
	}
	// A hundredth of a degree each way: R^2 dlon (sin lat2 - sin lat1).
	rad := math.Pi / 180
	want.Hectares = 100 * 6371.007181 * 6371.007181 * 0.01 * rad * (math.Sin(46.21*rad) - math.Sin(46.20*rad))
	close := cmpopts.EquateApprox(1e-9, 1e-9)
	if diff := cmp.Diff(want, slope, cmpopts.IgnoreFields(Stand{}, "Geometry"), close); diff != "" {
		t.Errorf("north-slope -want +got:\n%s", diff)
	}
	if g := slope.Geometry; g.Type != "Polygon" || len(g.Polygons) != 1 || len(g.Polygons[0][0]) != 5 || g.Polygons[0][0][1] != (Position{8.11, 46.20}) {
		t.Errorf("geometry %+v", g)
	}

	oak := *r.Stand("lone-oak")
	for name, v := range map[string]float64{
		"hectares": oak.Hectares, "elevation": float64(oak.Elevation), "canopy cover": oak.CanopyCover, "limit": float64(oak.StorageLimit),
		"interception": oak.InterceptionShare, "coefficient": oak.ETCoefficient, "p50": float64(oak.P50),
	} {
		if !math.IsNaN(v) {
			t.Errorf("lone-oak: %s %v, want NaN: it was not given", name, v)
		}
	}
	if oak.Latitude != 46.25 || oak.Longitude != 8.3 || oak.ExtraWater != "none" || oak.MonthlyReferenceET != nil {
		t.Errorf("lone-oak %+v", oak)
	}
	if wood := r.Stand("spring-wood"); wood.UTCOffset != 30*time.Minute || !math.IsNaN(wood.Species[0].Fraction) {
		t.Errorf("spring-wood %+v", wood)
	}
	if r.Stand("gauge-1") != nil {
		t.Error("a source is no stand")
	}
}

func TestSource(t *testing.T) {
	r := load(t, "testdata/alder.good.geojson")
	if diff := cmp.Diff([]string{"gauge-1", "gauge-2", "lone-oak", "north-slope", "probe-7", "spring-wood"}, r.SourceIDs()); diff != "" {
		t.Errorf("ids -want +got:\n%s", diff)
	}
	want := Source{
		ID: "gauge-1", Line: 45, Latitude: 46.2, Longitude: 8.15, Elevation: 760, Height: 1.5, UTCOffset: time.Hour,
		Feed: "loggers", Interval: 10 * time.Minute, Latency: time.Hour, Unit: "mm", Quantities: []quantity.Quantity{"precipitation"},
	}
	if diff := cmp.Diff(want, r.Source("gauge-1")); diff != "" {
		t.Errorf("gauge-1 -want +got:\n%s", diff)
	}
	for id, offset := range map[string]time.Duration{
		"gauge-2":     time.Hour,        // of its longitude
		"spring-wood": 30 * time.Minute, // a stand's own id: the stand's
		"probe-7":     time.Hour,        // no place: of the stand that names it
		"stranger":    0,                // nobody knows it
	} {
		if got := r.Source(id); got.UTCOffset != offset || got.ID != id {
			t.Errorf("%s: offset %v, want %v", id, got.UTCOffset, offset)
		}
	}
}

func TestFirstStandLendsItsDay(t *testing.T) {
	feature := func(id string, longitude float64) string {
		return fmt.Sprintf(`{"type":"Feature","id":%q,"geometry":{"type":"Point","coordinates":[%v,10]},
			"properties":{"name":"A","sources":{"ndvi":["passing-eye"]}}}`, id, longitude)
	}
	for _, first := range []float64{45, -60} {
		r, err := ParseRegister("x", []byte(`{"type":"FeatureCollection","features":[`+feature("b", first)+","+feature("a", 150)+`]}`))
		if err != nil {
			t.Fatal(err)
		}
		if got, want := r.Source("passing-eye").UTCOffset, time.Duration(first/15)*time.Hour; got != want {
			t.Errorf("offset %v, want %v, that of the first stand in the file", got, want)
		}
	}
}

// TestLines holds that places are right whatever the file's shape: the same
// mistake behind line breaks of either kind, escapes and wide characters.
func TestLines(t *testing.T) {
	const body = `{"type":"FeatureCollection","features":[{"type":"Feature","id":"a","geometry":{"type":"Point","coordinates":[8,46]},"properties":{"name":"%s",%s"p50_mpa":%s2}}]}`
	for name, c := range map[string]struct {
		text, between, before string
		line                  int
	}{
		"one line":        {"A", "", "", 1},
		"line breaks":     {"A", "\n\n", "\n", 4},
		"carriage return": {"A", "\r\n", "", 2},
		"escapes":         {`A \"}\\ \u00e4`, "\n", "", 2},
		"wide characters": {"Wäldli 🌲", "\n", "", 2},
	} {
		t.Run(name, func(t *testing.T) {
			_, err := ParseRegister("x", fmt.Appendf(nil, body, c.text, c.between, c.before))
			problems, ok := err.(Problems)
			if !ok || len(problems) != 1 || problems[0].Line != c.line || !strings.Contains(problems[0].Message, "positive") {
				t.Errorf("%v, want one problem on line %d", err, c.line)
			}
		})
	}
}

func FuzzParseRegister(f *testing.F) {
	for _, file := range seeds(f, "testdata/*.geojson") {
		f.Add(file)
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		r, err := ParseRegister("x.geojson", data)
		if err != nil {
			wellFormed(t, err)
			return
		}
		for i := range r.Stands {
			s := &r.Stands[i]
			if wrong, _ := isID(s.ID); wrong != "" || r.Stand(s.ID) != s || s.Hectares <= 0 {
				t.Fatalf("%+v", s)
			}
			if !(math.Abs(float64(s.Latitude)) <= 90 && math.Abs(float64(s.Longitude)) <= 180) {
				t.Fatalf("stand %s at %v, %v", s.ID, s.Latitude, s.Longitude)
			}
			if n := len(r.Draws(s, quantity.Precipitation)); n == 0 {
				t.Fatalf("stand %s draws on nothing, not even its own id", s.ID)
			}
			_ = r.Coverage(s).String()
		}
		if _, err := parse("saprolite.yaml", Starter(r, "stands.geojson"), ""); err != nil {
			t.Fatalf("the starter does not load: %v", err)
		}
	})
}

// wellFormed holds what every refusal owes the operator.
func wellFormed(t *testing.T, err error) {
	problems, ok := err.(Problems)
	if !ok || len(problems) == 0 {
		t.Fatalf("%T: %v", err, err)
	}
	for i, p := range problems {
		if p.File == "" || p.Message == "" || p.Cure == "" {
			t.Fatalf("incomplete: %+v", p)
		}
		if i > 0 && p.Line < problems[i-1].Line {
			t.Fatalf("line %d after %d", p.Line, problems[i-1].Line)
		}
	}
}

// BenchmarkParseRegister reads 10,000 stands of 60 corners each and 500
// sources.
func BenchmarkParseRegister(b *testing.B) {
	data := invented(10_000, 500, 60)
	b.SetBytes(int64(len(data)))
	b.ReportAllocs()
	for b.Loop() {
		if _, err := ParseRegister("x", data); err != nil {
			b.Fatal(err)
		}
	}
}

// invented writes a register of round stands on a grid half a degree wide.
func invented(stands, sources, corners int) []byte {
	var b strings.Builder
	b.WriteString(`{"type":"FeatureCollection","features":[`)
	side := int(math.Ceil(math.Sqrt(float64(stands))))
	for i := range stands {
		x, y := 8+0.5*float64(i%side)/float64(side), 46+0.5*float64(i/side)/float64(side)
		fmt.Fprintf(&b, "{\"type\":\"Feature\",\"id\":\"stand-%d\",\"properties\":{\"name\":\"Stand %d\",\"elevation_m\":%d,\"species\":[\"Fagus sylvatica\"]},\n\"geometry\":{\"type\":\"Polygon\",\"coordinates\":[[", i, i, 400+i%900)
		for k := range corners + 1 {
			s, c := math.Sincos(2 * math.Pi * float64(k%corners) / float64(corners))
			if k > 0 {
				b.WriteByte(',')
			}
			fmt.Fprintf(&b, "[%.7f,%.7f]", x+0.002*c, y+0.002*s)
		}
		b.WriteString("]]}},\n")
	}
	for i := range sources {
		fmt.Fprintf(&b, "{\"type\":\"Feature\",\"id\":\"gauge-%d\",\"properties\":{\"source\":true,\"elevation_m\":%d,\"quantities\":[\"precipitation\",\"air_temperature_min\",\"air_temperature_max\"]},\"geometry\":{\"type\":\"Point\",\"coordinates\":[%.5f,%.5f]}},\n",
			i, 400+i*7%900, 8+0.5*math.Mod(float64(i)*0.618034, 1), 46+0.5*math.Mod(float64(i)*0.414214, 1))
	}
	return []byte(strings.TrimSuffix(b.String(), ",\n") + "]}")
}
