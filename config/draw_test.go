package config

import (
	"fmt"
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"saprolite/ingest/quantity"
)

// TestDistancePublished: Los Angeles (33d57m N, 118d24m W) to New York Kennedy
// (40d38m N, 73d47m W) is 0.623585 radians (Ed Williams, Aviation Formulary,
// "Worked examples: distance between points"; from memory).
func TestDistancePublished(t *testing.T) {
	lax, jfk := directionOf(33+57./60, -(118+24./60)), directionOf(40+38./60, -(73+47./60))
	if got := distanceKM(lax, jfk) / meanRadiusKM; math.Abs(got-0.623585) > 5e-7 {
		t.Errorf("%.7f rad, want 0.623585", got)
	}
}

func drawPoint(t *rapid.T, name string) direction {
	return directionOf(rapid.Float64Range(-90, 90).Draw(t, name+" latitude"), rapid.Float64Range(-180, 180).Draw(t, name+" longitude"))
}

func TestDistanceProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		a, b, c := drawPoint(t, "a"), drawPoint(t, "b"), drawPoint(t, "c")
		ab, ba := distanceKM(a, b), distanceKM(b, a)
		if ab != ba {
			t.Fatalf("there %v, back %v", ab, ba)
		}
		if distanceKM(a, a) != 0 {
			t.Fatal("a point is away from itself")
		}
		if half := math.Pi * meanRadiusKM; ab < 0 || ab > half+1e-6 {
			t.Fatalf("%v km, half the equator is %v", ab, half)
		}
		if over := distanceKM(a, c) + distanceKM(c, b); ab > over+1e-3 { // near the antipode arcsine keeps a metre
			t.Fatalf("straight %v is longer than by way of c %v", ab, over)
		}
		if d2, limit := chord2(a, b), chord2Of(ab); math.Abs(d2-limit) > 1e-12 {
			t.Fatalf("chord^2 %v, of the distance %v", d2, limit)
		}
	})
}

// TestDistanceAlongMeridian: on a meridian the distance is R times the angle.
func TestDistanceAlongMeridian(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		lat := rapid.Float64Range(-80, 80).Draw(t, "latitude")
		step := rapid.Float64Range(1e-5, 5).Draw(t, "step")
		lon := rapid.Float64Range(-180, 180).Draw(t, "longitude")
		got, want := distanceKM(directionOf(lat, lon), directionOf(lat+step, lon)), meanRadiusKM*step*math.Pi/180
		if math.Abs(got-want) > 1e-6+1e-9*want { // km: a millimetre
			t.Fatalf("%v km, want %v", got, want)
		}
	})
}

// TestAreaOfSquare: between two meridians and two parallels a sphere has
// R^2 dlon (sin lat2 - sin lat1) (Archimedes' hat-box theorem), whichever way
// the ring winds and wherever it starts.
func TestAreaOfSquare(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		south, west := rapid.Float64Range(-89, 85).Draw(t, "south"), rapid.Float64Range(-180, 170).Draw(t, "west")
		size := math.Pow(10, rapid.Float64Range(-4, 0.6).Draw(t, "log10 degrees")) // 11 m to 4 degrees
		north, east := south+size, west+size
		corners := []Position{{west, south}, {east, south}, {east, north}, {west, north}}
		start := rapid.IntRange(0, 3).Draw(t, "start")
		ring := append(append([]Position{}, corners[start:]...), corners[:start]...)
		ring = append(ring, ring[0])
		rad := math.Pi / 180
		// sin b - sin a as a product, which keeps its digits for small squares.
		sines := 2 * math.Cos((north+south)/2*rad) * math.Sin((north-south)/2*rad)
		want := equalAreaRadiusKM * equalAreaRadiusKM * (east - west) * rad * sines
		got := ringArea(ring)
		if math.Abs(got-want) > 1e-6*want {
			t.Fatalf("%v km2, want %v", got, want)
		}
		for i, j := 0, len(ring)-1; i < j; i, j = i+1, j-1 {
			ring[i], ring[j] = ring[j], ring[i]
		}
		if back := ringArea(ring); math.Abs(back+got) > 1e-9*want {
			t.Fatalf("turned round %v, want %v", back, -got)
		}
	})
}

// TestPlanarRing is the ring of RFC 7946: signed area 1 square degree,
// counterclockwise positive (check-values section 12, "geojson").
func TestPlanarRing(t *testing.T) {
	area, lon, lat := planarRing([]Position{{100, 0}, {101, 0}, {101, 1}, {100, 1}, {100, 0}})
	if math.Abs(area-1) > 1e-12 || lon != 100.5 || lat != 0.5 {
		t.Errorf("area %v, centre %v %v", area, lon, lat)
	}
}

// TestCentreAndHoles: a square with a square hole in its south-west quarter,
// worked by hand: areas 4 and 1, so (4*1 - 1*0.5)/3 = 7/6 along both axes.
func TestCentreAndHoles(t *testing.T) {
	outer := []Position{{0, 0}, {2, 0}, {2, 2}, {0, 2}, {0, 0}}
	hole := []Position{{0, 0}, {0, 1}, {1, 1}, {1, 0}, {0, 0}}
	g := Geometry{Type: "Polygon", Polygons: [][][]Position{{outer, hole}}}
	lon, lat := g.centre()
	if math.Abs(lon-7./6) > 1e-12 || math.Abs(lat-7./6) > 1e-12 {
		t.Errorf("centre %v %v, want 7/6 7/6", lon, lat)
	}
	whole := Geometry{Type: "Polygon", Polygons: [][][]Position{{outer}}}
	if want := whole.hectares() - 100*math.Abs(ringArea(hole)); math.Abs(g.hectares()-want) > 1e-6 {
		t.Errorf("%v ha, want %v", g.hectares(), want)
	}
}

func TestDraws(t *testing.T) {
	r := load(t, "testdata/alder.good.geojson")
	names := func(stand string, q quantity.Quantity) (out []string) {
		for _, d := range r.Draws(r.Stand(stand), q) {
			out = append(out, d.String()+", "+d.Why)
		}
		return out
	}
	for _, c := range []struct {
		stand string
		q     quantity.Quantity
		want  []string
	}{
		// As written, though gauge-1 is the nearer in the sum.
		{"north-slope", quantity.Precipitation, []string{"gauge-2 (2.0 km, 120 m higher), named by the stand", "gauge-1 (3.5 km, 220 m lower), named by the stand"}},
		{"north-slope", quantity.AirTemperatureMin, []string{"north-slope, the stand's own", "gauge-2 (2.0 km, 120 m higher), near by"}},
		{"north-slope", quantity.NDVI, []string{"north-slope, the stand's own"}},
		{"north-slope", "soil_water_content:30", []string{"probe-7 (place unknown), named by the stand"}},
		{"north-slope", "soil_water_content:60", []string{"north-slope, the stand's own"}},
		{"lone-oak", quantity.Precipitation, []string{"lone-oak, the stand's own", "gauge-1 (12.8 km, height unknown), near by", "gauge-2 (14.2 km, height unknown), near by"}},
	} {
		if diff := cmp.Diff(c.want, names(c.stand, c.q)); diff != "" {
			t.Errorf("%s %s -want +got:\n%s", c.stand, c.q, diff)
		}
	}
}

// TestHeightAsDistance: 100 m of height weigh as 5/3 of 5 km (methods.md,
// "Neighbouring gauges": 0.05 per 100 m against 0.03 per 5 km).
func TestHeightAsDistance(t *testing.T) {
	if got, want := 100*heightAsKM, 25./3; math.Abs(got-want) > 1e-9 {
		t.Errorf("%v km per 100 m, want %v", got, want)
	}
	if got, want := (Draw{DistanceKM: 10, HeightM: -200}).RainError(), 0.05+0.06+0.10; math.Abs(got-want) > 1e-12 {
		t.Errorf("rain error %v, want %v", got, want)
	}
}

// TestNearestAgreesWithSorting holds the search against the plain rule: all
// within 100 km, sorted by score, the first three.
func TestNearestAgreesWithSorting(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := &Register{known: map[string]Source{}}
		stand := &Stand{ID: "here", Latitude: 46, Longitude: 8, Elevation: quantity.Metres(rapid.SampledFrom([]float64{500, nan}).Draw(t, "height"))}
		type scored struct {
			id    string
			score float64
		}
		var all []scored
		for i := range rapid.IntRange(0, 12).Draw(t, "sources") {
			s := unplaced(fmt.Sprintf("g%02d", i), 0)
			s.Latitude = quantity.Degrees(46 + rapid.Float64Range(-1.2, 1.2).Draw(t, "latitude"))
			s.Longitude = quantity.Degrees(8 + rapid.Float64Range(-1.5, 1.5).Draw(t, "longitude"))
			s.Elevation = quantity.Metres(rapid.SampledFrom([]float64{0, 500, 1500, nan}).Draw(t, "elevation"))
			s.Quantities = []quantity.Quantity{quantity.Precipitation}
			r.Positioned = append(r.Positioned, s)
			r.known[s.ID] = s
			km := distanceKM(directionOf(46, 8), directionOf(float64(s.Latitude), float64(s.Longitude)))
			if km > 100 {
				continue
			}
			score := km
			if up := math.Abs(float64(stand.Elevation - s.Elevation)); !math.IsNaN(up) {
				score += heightAsKM * up
			}
			all = append(all, scored{s.ID, score})
		}
		r.indexNearby()
		for i := range all { // selection sort: plain on purpose
			for j := i + 1; j < len(all); j++ {
				if before(all[j].score, all[j].id, all[i].score, all[i].id) {
					all[i], all[j] = all[j], all[i]
				}
			}
		}
		var want []string
		for _, s := range all[:min(3, len(all))] {
			want = append(want, s.id)
		}
		if diff := cmp.Diff(want, r.nearest(stand, quantity.Precipitation)); diff != "" {
			t.Fatalf("-want +got:\n%s", diff)
		}
	})
}

// BenchmarkDraws looks among 500 sources, all within reach.
func BenchmarkDraws(b *testing.B) {
	r, err := ParseRegister("x", invented(100, 500, 8))
	if err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		r.Draws(&r.Stands[i%100], quantity.Precipitation)
		i++
	}
}
