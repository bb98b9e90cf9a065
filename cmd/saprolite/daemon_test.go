package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"math"
	"net/http"
	"net/http/httptest"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/rs/zerolog"

	"saprolite/cmd/saprolite/engine"
	"saprolite/ingest/broker"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// patience bounds every wait of these tests; it is never waited for when all
// is well, however slow the machine.
const patience = time.Minute

// until waits until something is so.
func until(t *testing.T, what string, so func() bool) {
	t.Helper()
	for deadline := time.Now().Add(patience); !so(); time.Sleep(5 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("waited for %s in vain", what)
		}
	}
}

// hear waits for what a channel says.
func hear[T any](t *testing.T, what string, from <-chan T) (v T) {
	t.Helper()
	select {
	case v = <-from:
	case <-time.After(patience):
		t.Fatalf("waited for %s in vain", what)
	}
	return v
}

// notes is a log that a test reads while it is written.
type notes struct {
	mu   sync.Mutex
	text bytes.Buffer
}

func (n *notes) Write(p []byte) (int, error) {
	n.mu.Lock()
	defer n.mu.Unlock()
	return n.text.Write(p)
}

func (n *notes) count(what string) int {
	n.mu.Lock()
	defer n.mu.Unlock()
	return strings.Count(n.text.String(), what)
}

// oneStand is a home with the stand ridge, which has a small store.
func oneStand(t *testing.T, more string) *home {
	return newHome(t, write(t, t.TempDir(), "stands.geojson", `{"type": "FeatureCollection", "features": [
  {"type": "Feature", "id": "ridge", "geometry": {"type": "Point", "coordinates": [-122.3, 41.5]},
   "properties": {"name": "Ridge", "et_coefficient": 1, "interception_store_mm": 0, "storage_limit_mm": 60}}]}`), more)
}

// opened is a daemon that has opened its store, but for prepare not started.
func (h *home) opened(prepare func(*daemon)) *daemon {
	h.t.Helper()
	cfg, reg, err := readBoth(h.file)
	if err != nil {
		h.t.Fatal(err)
	}
	d, err := openDaemon(context.Background(), cfg, reg, zerolog.Nop())
	if err != nil {
		h.t.Fatal(err)
	}
	d.log = zerolog.Nop()
	if prepare != nil {
		prepare(d)
	}
	return d
}

// begin starts a daemon. end asks it to end, as SIGTERM does, and returns what
// it ended with; ended is closed when it has.
func begin(t *testing.T, d *daemon) (end func() error, ended <-chan struct{}) {
	t.Helper()
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan struct{})
	var err error
	go func() {
		defer close(done)
		err = d.run(ctx)
	}()
	end = func() error {
		cancel()
		<-done
		return err
	}
	t.Cleanup(func() { _ = end() })
	return end, done
}

func attach(t *testing.T, d *daemon) *broker.Broker {
	t.Helper()
	b, err := broker.Attach(t.Context(), d.cfg.Data)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := b.Close(context.Background()); err != nil {
			t.Error(err)
		}
	})
	return b
}

// raw is the store as any NATS tool of the operator sees it.
func raw(t *testing.T, d *daemon) jetstream.JetStream {
	t.Helper()
	var access struct{ URL, User, Password string }
	if err := json.Unmarshal([]byte(read(t, filepath.Join(d.cfg.Data, "operator.json"))), &access); err != nil {
		t.Fatal(err)
	}
	nc, err := nats.Connect(access.URL, nats.UserInfo(access.User, access.Password))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(nc.Close)
	js, err := jetstream.New(nc)
	if err != nil {
		t.Fatal(err)
	}
	return js
}

// ridgeOffset is of the stand's day: longitude / 15, rounded.
const ridgeOffset = -8 * time.Hour

// weather is a day at the ridge: a wet half year and a dry one.
func weather(source string, day quantity.Day) []observation.Observation {
	var list []observation.Observation
	rain, high := 12.0, 14.0
	if n := day.YearDay(); n > 120 && n < 300 {
		rain, high = 0, 31
	}
	for _, v := range []struct {
		of    quantity.Quantity
		value float64
	}{{quantity.Precipitation, rain + float64(day%97)/100}, {quantity.AirTemperatureMax, high}, {quantity.AirTemperatureMin, high - 12}} {
		list = append(list, observation.Observation{
			Source: source, Quantity: v.of, Start: day.End(ridgeOffset), End: day.End(ridgeOffset), Value: v.value,
			SD: math.NaN(), Flag: observation.NotEvaluated,
		})
	}
	return list
}

// An actor that fails after the daemon was asked to end fails the daemon: what
// the last save could not write is said and is in the exit code.
func TestLastSaveFails(t *testing.T) {
	h := oneStand(t, "")
	d := h.opened(func(d *daemon) { d.invented = true })
	end, _ := begin(t, d)
	feed := attach(t, d)
	publish(t, feed, "obs.station.ridge", weather("ridge", quantity.DateOf(2031, time.May, 1)))
	tick(t, d, feed, time.Date(2031, time.May, 2, 15, 0, 0, 0, time.UTC))
	books, err := feed.Books(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if _, err := books.Put(t.Context(), engine.CursorKey, []byte("somebody else's")); err != nil {
		t.Fatal(err)
	}
	err = end()
	if !errors.Is(err, broker.ErrMoved) || !strings.Contains(err.Error(), "save books") {
		t.Errorf("ended with %v, want the save that failed", err)
	}
	var said strings.Builder
	if code := exitCode(err, &said); code != exitTemporary || strings.Count(said.String(), "save books") != 1 {
		t.Errorf("exit %d, said %q", code, said.String())
	}
}

// A store that goes away under the loop ends the daemon, and everybody who
// failed is heard; the first decides the code.
func TestStoreClosedUnderTheLoop(t *testing.T) {
	h := oneStand(t, "")
	d := h.opened(func(d *daemon) { d.invented = true })
	end, ended := begin(t, d)
	until(t, "the daemon to serve", func() bool { return d.watch.address() != d.cfg.HTTP.Listen })
	if err := d.broker.Close(t.Context()); err != nil {
		t.Fatal(err)
	}
	hear(t, "the end", ended)
	if code := exitCode(end(), &strings.Builder{}); code != exitTemporary {
		t.Errorf("exit %d: %v", code, end())
	}
}

func TestFailuresAreJoined(t *testing.T) {
	first := &broker.Error{Code: broker.Unreachable, Op: "publishing a tick"}
	second := exitWith(exitConfiguration, errors.New("the second to fail"))
	var f failures
	for _, err := range []error{nil, first, nil, second} {
		if got := f.add(err); got != err {
			t.Errorf("%v came back as %v", err, got)
		}
	}
	var said strings.Builder
	if code := exitCode(f.joined(), &said); code != exitTemporary {
		t.Errorf("exit %d, want the first error's", code)
	}
	if !strings.Contains(said.String(), "publishing a tick") || !strings.Contains(said.String(), "the second to fail") {
		t.Errorf("said %q", said.String())
	}
	var none failures
	if err := errors.Join(none.add(nil), none.joined()); err != nil {
		t.Error(err)
	}
}

// page asks one of the daemon's pages.
func page(t *testing.T, d *daemon, path string) (status int, body string) {
	t.Helper()
	h, err := d.watch.handler()
	if err != nil {
		t.Fatal(err)
	}
	w := httptest.NewRecorder()
	h.ServeHTTP(w, httptest.NewRequest(http.MethodGet, path, nil))
	return w.Code, w.Body.String()
}

func TestReadiness(t *testing.T) {
	h := oneStand(t, "")
	log := &notes{}
	d := h.opened(func(d *daemon) { d.again, d.log = 20*time.Millisecond, zerolog.New(log) })

	if status, body := page(t, d, "/readyz"); status != http.StatusServiceUnavailable || !strings.Contains(body, "still taking in") {
		t.Errorf("before the start: %d %s", status, body)
	}
	turned := d.watch.turnedAt.Swap(time.Now().Add(-2 * stuckAfter).UnixNano())
	for _, path := range []string{"/readyz", "/healthz"} {
		if status, body := page(t, d, path); status != http.StatusServiceUnavailable || !strings.Contains(body, "the loop has not turned for 10m0s") {
			t.Errorf("%s of a loop that is stuck: %d %s", path, status, body)
		}
	}
	d.watch.turnedAt.Store(turned)

	end, ended := begin(t, d)
	until(t, "readiness", func() bool { status, _ := page(t, d, "/readyz"); return status == http.StatusOK })
	if status, body := page(t, d, "/healthz"); status != http.StatusOK || !strings.Contains(body, "alive") {
		t.Errorf("/healthz: %d %s", status, body)
	}

	// A store that takes nothing any more, though it answers: its limit is
	// what it holds.
	filled(t, d)
	d.settle <- struct{}{} // a tick now, not at the next full hour
	until(t, "a tick that fails", func() bool { status, _ := page(t, d, "/readyz"); return status == http.StatusServiceUnavailable })
	if _, body := page(t, d, "/readyz"); !strings.Contains(body, "the last tick could not be stored") || !strings.Contains(body, "full") {
		t.Errorf("/readyz does not say why: %s", body)
	}
	if status, _ := page(t, d, "/healthz"); status != http.StatusOK {
		t.Error("a full store is no reason to call the loop dead")
	}
	hear(t, "the end", ended)
	if code := exitCode(end(), &strings.Builder{}); code != exitTemporary || !strings.Contains(end().Error(), "6 tries in a row") {
		t.Errorf("exit %d: %v", code, end())
	}
	if n := log.count("tick could not be stored"); n != 1 {
		t.Errorf("said %d times that a tick could not be stored", n)
	}
}

// filled makes the limit of OBSERVATIONS so small that it is full.
func filled(t *testing.T, d *daemon) {
	t.Helper()
	js := raw(t, d)
	s, err := js.Stream(t.Context(), broker.Observations)
	if err != nil {
		t.Fatal(err)
	}
	c := s.CachedInfo().Config
	c.MaxBytes = int64(s.CachedInfo().State.Bytes)
	if _, err := js.UpdateStream(t.Context(), c); err != nil {
		t.Fatal(err)
	}
}

// A stream that is full of what the loop has still to work on is no reason to
// begin that work again; full of what it has read is.
func TestFullWhileBehind(t *testing.T) {
	h := oneStand(t, "")
	d := h.opened(func(d *daemon) { d.again = time.Millisecond }) // without its loop
	defer d.close()
	day := quantity.DateOf(2031, time.May, 1)
	publish(t, d.broker, "obs.station.ridge", weather("ridge", day))
	filled(t, d)
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	ended := make(chan error, 1)
	go func() { ended <- d.clock(ctx) }()
	until(t, "a tick that fails", func() bool { return d.watch.failed.Load() != nil })
	select {
	case err := <-ended:
		t.Fatalf("the clock ended although the loop is behind: %v", err)
	case <-time.After(200 * time.Millisecond): // time for far more than six tries; it is never too short for code that is right
	}
	d.watch.took(1)
	if code := exitCode(hear(t, "the end", ended), &strings.Builder{}); code != exitTemporary {
		t.Errorf("exit %d", code)
	}
}

// A few ticks that fail do not end the daemon, and it is ready when one is
// stored again.
func TestClockRecovers(t *testing.T) {
	h := oneStand(t, "")
	log := &notes{}
	d := h.opened(func(d *daemon) { d.again, d.log = time.Second, zerolog.New(log) })
	end, _ := begin(t, d)
	until(t, "readiness", func() bool { status, _ := page(t, d, "/readyz"); return status == http.StatusOK })
	js := raw(t, d)
	s, err := js.Stream(t.Context(), broker.Observations)
	if err != nil {
		t.Fatal(err)
	}
	filled(t, d)
	d.settle <- struct{}{}
	until(t, "a tick that fails", func() bool { status, _ := page(t, d, "/readyz"); return status == http.StatusServiceUnavailable })
	if _, err := js.UpdateStream(t.Context(), s.CachedInfo().Config); err != nil {
		t.Fatal(err)
	}
	until(t, "readiness to come back", func() bool { status, _ := page(t, d, "/readyz"); return status == http.StatusOK })
	if err := end(); err != nil {
		t.Error(err)
	}
	if log.count("tick could not be stored") != 1 || log.count("stored again") != 1 {
		t.Errorf("the log:\n%s", log.text.String())
	}
}

// The first load has a clock too: a row that is dated years ahead is held.
func TestFirstLoadHoldsTheFuture(t *testing.T) {
	h := oneStand(t, "")
	file := write(t, filepath.Dir(h.file), "history.csv", "source,quantity,start,value,unit\n"+
		"ridge,precipitation,2024-01-01,3,mm\nridge,precipitation,2105-01-02,40,mm\nridge,precipitation,2024-01-03,4,mm\n")
	code, out, errs := call(t, "load", file, "--config", h.file)
	if code != exitData || !strings.Contains(errs, "held: ridge") || !strings.Contains(errs, "2105") || !strings.Contains(errs, "check the logger's clock") {
		t.Fatalf("exit %d\n%s%s", code, out, errs)
	}
	d := h.opened(nil)
	defer d.close()
	held, ok, err := d.broker.Last(t.Context(), broker.Held, "held.load.ridge")
	if err != nil || !ok || !strings.Contains(string(held.Data), `"future"`) || !strings.Contains(string(held.Data), "2105") {
		t.Errorf("held: %v %v %s", ok, err, held.Data)
	}
	if day, has := d.keeper.engine.Stands()[0].Account.First(), d.keeper.engine.Stands()[0].Account != nil; !has || day != quantity.DateOf(2024, time.January, 1) {
		t.Errorf("the account begins on %s", day)
	}
}
