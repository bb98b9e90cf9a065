package ledger

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"

	"saprolite/detectors/climate"
	"saprolite/ingest/quantity"
)

// readTable reads a CSV file of testdata into columns by name.
func readTable(t *testing.T, name string) map[string][]string {
	t.Helper()
	file, err := os.Open("testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	columns := map[string][]string{}
	for i, column := range rows[0] {
		for _, row := range rows[1:] {
			columns[column] = append(columns[column], row[i])
		}
	}
	return columns
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// Four years of real weather (testdata/SOURCE.md) against testdata/seattle.py,
// which shares no code with this package, day by day.
func TestSeattleAgreesWithTheIndependentScript(t *testing.T) {
	weather := readTable(t, "seattle-weather.csv")
	site := climate.Site{Latitude: 47.45, Elevation: quantity.Metres(math.NaN())}
	for _, c := range []struct {
		file     string
		capacity quantity.Millimetres
	}{
		{"seattle-unlimited.csv", quantity.Millimetres(math.NaN())},
		{"seattle-500.csv", 500},
	} {
		t.Run(c.file, func(t *testing.T) {
			want := readTable(t, c.file)
			if len(want["day"]) != 1461 || len(weather["date"]) != 1461 {
				t.Fatalf("%d days of weather, %d computed, want 1461", len(weather["date"]), len(want["day"]))
			}
			var s Store
			p := &Params{Capacity: c.capacity, StressAt: DefaultStressAt}
			for i, date := range weather["date"] {
				day, err := quantity.ParseDay(date)
				if err != nil {
					t.Fatal(err)
				}
				w := climate.Unknown()
				w.Day = day
				w.TMin = quantity.Celsius(number(t, weather["temp_min"][i]))
				w.TMax = quantity.Celsius(number(t, weather["temp_max"][i]))
				reference, basis := climate.Reference(&site, &w)
				if basis != climate.ByHargreaves {
					t.Fatalf("%s: reference by %v", date, basis)
				}
				f := s.Day(modelled(quantity.Millimetres(number(t, weather["precipitation"][i])), reference, 1), p)
				if want["day"][i] != date {
					t.Fatalf("row %d is %s, weather has %s", i+1, want["day"][i], date)
				}
				for column, got := range map[string]quantity.Millimetres{
					"reference_et_mm": reference, "actual_et_mm": f.ActualET, "overflow_mm": f.Overflow, "deficit_mm": s.Deficit,
				} {
					if w := number(t, want[column][i]); math.Abs(float64(got)-w) > 1e-9 {
						t.Fatalf("%s: %s %v, the script has %v", date, column, float64(got), w)
					}
				}
			}
		})
	}
}

// The yearly maxima known beforehand, from a computation that is neither the
// script nor this package.
func TestSeattleYearlyMaxima(t *testing.T) {
	account := readTable(t, "seattle-unlimited.csv")
	type peak struct {
		deficit float64
		on      string
	}
	peaks := map[string]peak{}
	for i, day := range account["day"] {
		if d := number(t, account["deficit_mm"][i]); d > peaks[day[:4]].deficit {
			peaks[day[:4]] = peak{d, day}
		}
	}
	for year, want := range map[string]peak{
		"2012": {443.325, "2012-10-11"}, "2013": {432.222, "2013-09-04"},
		"2014": {475.259, "2014-09-22"}, "2015": {562.667, "2015-10-06"},
	} {
		if got := peaks[year]; math.Abs(got.deficit-want.deficit) > 0.0005 || got.on != want.on {
			t.Errorf("%s: %+v, want %+v", year, got, want)
		}
	}
}
