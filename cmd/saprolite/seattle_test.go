package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"saprolite/alerts"
)

// The weather of Seattle, 2012 to 2015, and the independent account of it by
// detectors/ledger/testdata/seattle.py, described in SOURCE.md there.
const seattleData = "../../detectors/ledger/testdata"

// seattle writes the register and the history and runs the hindcast.
func seattle(t *testing.T, limit string) (daily []map[string]string, told []alerts.Message) {
	t.Helper()
	dir := t.TempDir()
	stands, file := seattleFiles(t, dir, limit)
	dailyFile, alertsFile := filepath.Join(dir, "daily.csv"), filepath.Join(dir, "alerts.jsonl")
	if code, out, errs := call(t, "hindcast", "--stands", stands, "--history", file, "--daily", dailyFile, "--alerts", alertsFile); code != 0 {
		t.Fatalf("exit %d\n%s%s", code, out, errs)
	}
	for line := range strings.Lines(read(t, alertsFile)) {
		var m alerts.Message
		if err := json.Unmarshal([]byte(line), &m); err != nil {
			t.Fatal(err)
		}
		told = append(told, m)
	}
	return table(t, dailyFile), told
}

// seattleFiles writes the register and the history.
func seattleFiles(t *testing.T, dir, limit string) (stands, file string) {
	t.Helper()
	stands = write(t, dir, "stands.geojson", `{"type": "FeatureCollection", "features": [
  {"type": "Feature", "id": "seattle", "geometry": {"type": "Point", "coordinates": [-122.31, 47.45]},
   "properties": {"name": "Seattle", "et_coefficient": 1, "interception_store_mm": 0`+limit+`}}]}`)
	var history strings.Builder
	history.WriteString("source,quantity,start,value,unit\n")
	for _, r := range table(t, filepath.Join(seattleData, "seattle-weather.csv")) {
		day := strings.ReplaceAll(r["date"], "/", "-")
		fmt.Fprintf(&history, "seattle,precipitation,%s,%s,mm\n", day, r["precipitation"])
		fmt.Fprintf(&history, "seattle,air_temperature_max,%s,%s,Cel\n", day, r["temp_max"])
		fmt.Fprintf(&history, "seattle,air_temperature_min,%s,%s,Cel\n", day, r["temp_min"])
	}
	return stands, write(t, dir, "history.csv", history.String())
}

// table reads a CSV file with a header.
func table(t *testing.T, name string) []map[string]string {
	t.Helper()
	f, err := os.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out []map[string]string
	for _, r := range rows[1:] {
		m := map[string]string{}
		for i, name := range rows[0] {
			m[name] = r[i]
		}
		out = append(out, m)
	}
	return out
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// agrees compares the hindcast's account with the independent one, day by
// day. The daily file is rounded to 1e-6 mm.
func agrees(t *testing.T, daily []map[string]string, reference string) {
	t.Helper()
	want := table(t, filepath.Join(seattleData, reference))
	if len(daily) != len(want) {
		t.Fatalf("%d days, want %d", len(daily), len(want))
	}
	for i, w := range want {
		if daily[i]["day"] != w["day"] {
			t.Fatalf("row %d is of %s, want %s", i, daily[i]["day"], w["day"])
		}
		for _, column := range []string{"reference_et_mm", "actual_et_mm", "overflow_mm", "deficit_mm"} {
			got, want := number(t, daily[i][column]), number(t, w[column])
			if math.Abs(got-want) > 0.6e-6 {
				t.Errorf("%s %s: %v, the independent script has %v", w["day"], column, got, want)
			}
		}
	}
}

// check-values, "Regression numbers": yearly maxima of the running deficit
// with Hargreaves-Samani reference evapotranspiration and no stress. They are
// made again by seattle.py.
func TestSeattleWithoutLimit(t *testing.T) {
	daily, told := seattle(t, "")
	agrees(t, daily, "seattle-unlimited.csv")
	most, on := map[string]float64{}, map[string]string{}
	for _, r := range daily {
		year := r["day"][:4]
		if d := number(t, r["deficit_mm"]); d > most[year] {
			most[year], on[year] = d, r["day"]
		}
		if r["et_basis"] != "hargreaves" || r["limit_mm"] != "" {
			t.Fatalf("%s: et_basis %q, limit %q", r["day"], r["et_basis"], r["limit_mm"])
		}
	}
	for year, want := range map[string]float64{"2012": 443.3, "2013": 432.2, "2014": 475.3, "2015": 562.7} {
		if math.Abs(most[year]-want) > 0.05 {
			t.Errorf("%s: largest deficit %.3f mm, want %.1f", year, most[year], want)
		}
	}
	wantDays := map[string]string{"2012": "2012-10-11", "2013": "2013-09-04", "2014": "2014-09-22", "2015": "2015-10-06"}
	if diff := cmp.Diff(wantDays, on); diff != "" {
		t.Errorf("days of the maxima (-want +got):\n%s", diff)
	}
	last := daily[len(daily)-1]
	if want := "unknown: 4 complete years of annual maxima, needs 5"; last["limit_basis"] != want {
		t.Errorf("limit basis %q, want %q", last["limit_basis"], want)
	}
	if len(told) != 0 {
		t.Errorf("%d messages without a limit", len(told))
	}
}

// With 500 mm and stress the account follows seattle-500.csv. The share left
// falls to 0.40 and 0.25 or below on the days that file shows; a level is
// entered on the third day in a row of that and left on the seventh in a row
// of more than 0.101 above it (methods H.1).
func TestSeattleWithLimit(t *testing.T) {
	daily, told := seattle(t, `, "storage_limit_mm": 500`)
	agrees(t, daily, "seattle-500.csv")
	var got []string
	for _, m := range told {
		level := string(m.Level)
		if m.MsgType == alerts.Cancel {
			level = string(m.EndedWhy)
		}
		got = append(got, fmt.Sprintf("%s %s %s", m.Day, m.MsgType, level))
		if m.Kind != "store-low" || m.Caution != alerts.Caution || m.Late || m.FieldCheck == "" || m.EndsWhen == "" {
			t.Errorf("%s: kind %s, late %v", m.MessageID(), m.Kind, m.Late)
		}
	}
	want := []string{
		"2012-08-25 Alert drawing down",
		"2012-10-03 Update low",
		"2012-10-28 Update drawing down",
		"2012-11-05 Cancel over",
		"2013-07-28 Alert drawing down",
		"2013-08-27 Update low",
		"2013-10-04 Update drawing down",
		"2013-10-07 Cancel over",
		"2014-07-31 Alert drawing down",
		"2014-09-16 Update low",
		"2014-10-24 Update drawing down",
		"2014-11-03 Cancel over",
		"2015-07-05 Alert drawing down",
		"2015-07-29 Update low",
		"2015-11-05 Update drawing down",
		"2015-11-13 Cancel over",
	}
	if diff := cmp.Diff(storeLowDays(t), want); diff != "" {
		t.Errorf("the independent account has other days (-account +written here):\n%s", diff)
	}
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("messages (-want +got):\n%s", diff)
	}
}

// storeLowDays works the levels out from the independent account, by the
// plain reading of methods H.1.
func storeLowDays(t *testing.T) []string {
	left := []float64{}
	days := []string{}
	for _, r := range table(t, filepath.Join(seattleData, "seattle-500.csv")) {
		left = append(left, 1-number(t, r["deficit_mm"])/500)
		days = append(days, r["day"])
	}
	all := func(from, n int, ok func(float64) bool) bool {
		for i := from - n + 1; i <= from; i++ {
			if i < 0 || !ok(left[i]) {
				return false
			}
		}
		return true
	}
	thresholds := []float64{0.40, 0.25, 0.10, 0.03}
	names := []string{"drawing down", "low", "nearly spent", "spent"}
	on := make([]bool, 4)
	level, out := -1, []string{}
	for i := range left {
		for k, threshold := range thresholds {
			// 0.8416 is the normal quantile of 0.8, 0.12 the structural sd.
			if !on[k] && all(i, 3, func(f float64) bool { return f <= threshold }) {
				on[k] = true
			} else if on[k] && all(i, 7, func(f float64) bool { return f > threshold+0.8416212*0.12 }) {
				on[k] = false
			}
		}
		now := -1
		for k := range on {
			if on[k] {
				now = k
			}
		}
		switch {
		case now == level:
			continue
		case now < 0:
			out = append(out, days[i]+" Cancel over")
		case level < 0:
			out = append(out, days[i]+" Alert "+names[now])
		default:
			out = append(out, days[i]+" Update "+names[now])
		}
		level = now
	}
	return out
}
