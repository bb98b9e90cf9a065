package metrics

import (
	"errors"
	"fmt"
	"io"
	"math"
	"net"
	"net/http"
	"net/http/httptest"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/testutil/promlint"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

var now = time.Date(2031, 8, 15, 6, 0, 0, 0, time.UTC)

func snapshot() Snapshot {
	return Snapshot{
		Stands:      map[finding.Level]int{"": 700, finding.DrawingDown: 60, finding.Low: 30, finding.NearlySpent: 8, finding.Spent: 2},
		BlindStands: 5,
		Deficit:     SpreadOf([]quantity.Millimetres{12, 131.5, quantity.Millimetres(math.NaN()), 80}),
		Used:        SpreadOf([]float64{0.25, 0.75}),

		Observations: 1234567, Held: 89, LastTick: now.Add(-time.Hour),
		StreamBytes: map[string]uint64{"OBSERVATIONS": 1 << 30, "ALERTS": 1 << 20, "HELD": 0},
		CursorLag:   3,
		Told:        map[finding.Kind]uint64{finding.StoreLow: 17, "run-out": 2},
		Destinations: []Destination{
			{Name: "office", Pending: 2, Dead: 1, OldestPending: now.Add(-90 * time.Second), LastSuccess: now.Add(-time.Minute)},
			{Name: "new"},
		},
		BookSaves: 10, BookSaveTook: 1500 * time.Millisecond,
	}
}

func registry(t *testing.T, read func() Snapshot) *prometheus.Registry {
	t.Helper()
	reg := prometheus.NewPedanticRegistry()
	_, err := New(reg, Options{
		Build: BuildInfo{"1.2.3", "abc", "go1.26"}, Start: now.Add(-time.Hour),
		Read: read, Now: func() time.Time { return now },
	})
	if err != nil {
		t.Fatal(err)
	}
	return reg
}

func get(t *testing.T, h http.Handler, path string) (status int, body string) {
	t.Helper()
	w := httptest.NewRecorder()
	h.ServeHTTP(w, httptest.NewRequest(http.MethodGet, path, nil))
	return w.Code, w.Body.String()
}

// The values are those of snapshot, in base units.
func TestScrape(t *testing.T) {
	_, body := get(t, Handler(registry(t, snapshot), Checks{}), "/metrics")
	var got []string
	for line := range strings.Lines(body) {
		if strings.HasPrefix(line, "saprolite_") {
			got = append(got, strings.TrimSpace(line))
		}
	}
	want := strings.Fields(strings.ReplaceAll(`
saprolite_alerts_told_total{kind="feed-silent"}~0
saprolite_alerts_told_total{kind="run-out"}~2
saprolite_alerts_told_total{kind="store-low"}~17
saprolite_blind_stands~5
saprolite_book_save_duration_seconds_sum~1.5
saprolite_book_save_duration_seconds_count~10
saprolite_build_info{goversion="go1.26",revision="abc",version="1.2.3"}~1
saprolite_cursor_lag_messages~3
saprolite_destination_dead_messages{destination="new"}~0
saprolite_destination_dead_messages{destination="office"}~1
saprolite_destination_last_success_timestamp_seconds{destination="office"}~1.94453994e+09
saprolite_destination_oldest_pending_age_seconds{destination="new"}~0
saprolite_destination_oldest_pending_age_seconds{destination="office"}~90
saprolite_destination_pending_messages{destination="new"}~0
saprolite_destination_pending_messages{destination="office"}~2
saprolite_last_tick_timestamp_seconds~1.9445364e+09
saprolite_observations_held_total~89
saprolite_observations_total~1.234567e+06
saprolite_stands{level="drawing~down"}~60
saprolite_stands{level="low"}~30
saprolite_stands{level="nearly~spent"}~8
saprolite_stands{level="none"}~700
saprolite_stands{level="spent"}~2
saprolite_start_time_seconds~1.9445364e+09
saprolite_storage_deficit_meters{statistic="largest"}~0.1315
saprolite_storage_deficit_meters{statistic="median"}~0.08
saprolite_storage_used_ratio{statistic="largest"}~0.75
saprolite_storage_used_ratio{statistic="median"}~0.5
saprolite_stream_bytes{stream="ALERTS"}~1.048576e+06
saprolite_stream_bytes{stream="HELD"}~0
saprolite_stream_bytes{stream="OBSERVATIONS"}~1.073741824e+09
`, "\n", " "))
	for i := range want {
		want[i] = strings.ReplaceAll(want[i], "~", " ")
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Errorf("/metrics (-want +got):\n%s", d)
	}
	for _, of := range []string{"go_goroutines ", "process_open_fds "} {
		if !strings.Contains(body, "\n"+of) {
			t.Errorf("%s is missing", of)
		}
	}
}

func TestWhatIsNotKnownIsLeftOut(t *testing.T) {
	none := SpreadOf([]float64{})
	_, body := get(t, Handler(registry(t, func() Snapshot { return Snapshot{Deficit: none, Used: none} }), Checks{}), "/metrics")
	for _, name := range []string{"last_tick", "storage_deficit", "storage_used", "last_success"} {
		if strings.Contains(body, "\nsaprolite_"+name) {
			t.Errorf("%s is shown though nothing is known", name)
		}
	}
	if strings.Contains(body, "NaN") {
		t.Error("NaN is shown")
	}
}

// badWords are units that are not base units, and shortened units, which
// promlint's own table does not know (style.md, visit 6).
var badWords = []string{"mm", "cm", "km", "millimeters", "millimetres", "metres", "mpa", "kpa", "hpa", "pa", "megapascals", "kilopascals", "bar",
	"ms", "milliseconds", "minutes", "hours", "days", "weeks", "percent", "celsius_degrees", "degc", "kb", "mb", "kilobytes", "megabytes", "hectares"}

func nonBaseUnits(name string) (bad []string) {
	for word := range strings.SplitSeq(name, "_") {
		if slices.Contains(badWords, word) {
			bad = append(bad, word)
		}
	}
	return bad
}

func TestNames(t *testing.T) {
	families, err := registry(t, snapshot).Gather()
	if err != nil {
		t.Fatal(err)
	}
	own := families[:0]
	for _, f := range families {
		if strings.HasPrefix(f.GetName(), "saprolite_") {
			own = append(own, f)
			if bad := nonBaseUnits(f.GetName()); bad != nil {
				t.Errorf("%s: %v is not a base unit", f.GetName(), bad)
			}
		}
	}
	if len(own) != 17 {
		t.Errorf("%d metrics of our own were linted, want all 17", len(own))
	}
	problems, err := promlint.NewWithMetricFamilies(own).Lint()
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range problems {
		t.Errorf("%s: %s", p.Metric, p.Text)
	}
	for _, name := range []string{"saprolite_deficit_mm", "saprolite_potential_mpa", "saprolite_age_days", "saprolite_deficit_millimeters"} {
		if nonBaseUnits(name) == nil {
			t.Errorf("our rule lets %s pass", name)
		}
	}
}

// reliability.md section 6: /metrics stays below 500 series at any number of
// stands. With ten destinations, all kinds of design 5.6 and the runtime's own.
func TestFewSeries(t *testing.T) {
	s := snapshot()
	for i := range 10 {
		s.Destinations = append(s.Destinations, Destination{Name: fmt.Sprint("office-", i), LastSuccess: now})
	}
	for i := range 13 {
		s.Told[finding.Kind(fmt.Sprint("kind-", i))] = 1
	}
	s.Stands[""] = 10_000_000
	_, body := get(t, Handler(registry(t, func() Snapshot { return s }), Checks{}), "/metrics")
	n := 0
	for line := range strings.Lines(body) {
		if !strings.HasPrefix(line, "#") {
			n++
		}
	}
	if n >= 500 || n < 60 {
		t.Errorf("%d series, want fewer than 500 (and the runtime's own among them)", n)
	}
}

func TestNewRefuses(t *testing.T) {
	reg := registry(t, snapshot)
	if _, err := New(reg, Options{Read: snapshot}); err == nil {
		t.Error("registered twice without an error")
	}
	if _, err := New(prometheus.NewRegistry(), Options{}); err == nil {
		t.Error("no error without a state to read")
	}
}

func TestSpreadOf(t *testing.T) {
	in := []float64{3, math.NaN(), 1, 2, 10}
	before := slices.Clone(in)
	if got := SpreadOf(in); got != (Spread{2.5, 10}) {
		t.Errorf("got %v, want median 2.5 and largest 10", got)
	}
	if d := cmp.Diff(before, in, cmp.Comparer(func(a, b float64) bool { return a == b || a != a && b != b })); d != "" {
		t.Errorf("the input was changed:\n%s", d)
	}
	if got := SpreadOf([]float64{4, 2, 9}); got != (Spread{4, 9}) {
		t.Errorf("got %v, want median 4 and largest 9", got)
	}
	if got := SpreadOf([]float64{math.NaN()}); !math.IsNaN(got.Median) || !math.IsNaN(got.Largest) {
		t.Errorf("got %v of nothing known, want NaN", got)
	}
}

func TestHealth(t *testing.T) {
	var dead error
	var r Readiness
	h := Handler(prometheus.NewRegistry(), Checks{Alive: func() error { return dead }, Ready: func() Readiness { return r }})
	check := func(path string, status int, body string) {
		t.Helper()
		if gotStatus, gotBody := get(t, h, path); gotStatus != status || gotBody != body {
			t.Errorf("%s: %d %q, want %d %q", path, gotStatus, gotBody, status, body)
		}
	}
	check("/healthz", 200, "alive\n")
	check("/readyz", 200, "ready\n")
	r.Degraded = []string{"mail relay does not answer since 05:00"}
	check("/readyz", 200, "ready\ndegraded: mail relay does not answer since 05:00\n")
	r.Unready = []string{"OBSERVATIONS is full"}
	check("/readyz", 503, "not ready: OBSERVATIONS is full\ndegraded: mail relay does not answer since 05:00\n")
	check("/healthz", 200, "alive\n") // what makes it unready does not make it dead
	dead = errors.New("the loop has not turned for 2 minutes")
	check("/healthz", 503, "not alive: the loop has not turned for 2 minutes\n")
	check("/", 404, "404 page not found\n")
	w := httptest.NewRecorder()
	h.ServeHTTP(w, httptest.NewRequest(http.MethodPost, "/healthz", nil))
	if w.Code != http.StatusMethodNotAllowed {
		t.Errorf("POST /healthz: %d", w.Code)
	}
}

func TestServer(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	s := Server(Handler(registry(t, snapshot), Checks{}))
	go func() { _ = s.Serve(l) }()
	defer s.Close()
	res, err := http.Get("http://" + l.Addr().String() + "/metrics")
	if err != nil {
		t.Fatal(err)
	}
	defer res.Body.Close()
	body, err := io.ReadAll(res.Body)
	if err != nil || res.StatusCode != 200 || !strings.Contains(string(body), "saprolite_build_info") {
		t.Errorf("status %s, error %v, body %.100q", res.Status, err, body)
	}
	if s.ReadHeaderTimeout == 0 || s.ReadTimeout == 0 || s.WriteTimeout <= 10*time.Second || s.IdleTimeout == 0 {
		t.Error("a limit is missing, or writing ends before a scrape may")
	}
}
