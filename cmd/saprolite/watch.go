package main

import (
	"context"
	"errors"
	"fmt"
	"net"
	"net/http"
	"runtime"
	"runtime/debug"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"github.com/prometheus/client_golang/prometheus"

	"saprolite/alerts"
	"saprolite/alerts/metrics"
	"saprolite/cmd/saprolite/engine"
	"saprolite/detectors/finding"
	"saprolite/ingest/broker"
)

// watch shows the daemon from outside: /metrics, /healthz, /readyz. The loop
// looks at the engine from time to time and leaves what it saw here; nobody
// else touches the engine.
type watch struct {
	daemon   *daemon
	couriers []*alerts.Courier
	started  time.Time

	seen     atomic.Pointer[sight]
	turnedAt atomic.Int64          // Unix nanoseconds of the loop's last turn
	cursor   atomic.Uint64         // the last message the loop has taken in
	caught   atomic.Bool           // the loop has once been at the stream's end
	failed   atomic.Pointer[error] // of the clock's last write; nil: it was stored

	mu       sync.Mutex
	taken    chan struct{} // closed when a message is taken in; nil: nobody waits
	listener net.Addr
}

// sight is what the loop saw of the engine.
type sight struct {
	metrics.Snapshot
	stores []string // a line a stand, for the demo
}

func newWatch(d *daemon) *watch {
	w := &watch{daemon: d, started: d.began}
	w.cursor.Store(d.keeper.engine.Cursor())
	w.turned()
	w.look()
	return w
}

// turned is called by the loop at each of its turns.
func (w *watch) turned() { w.turnedAt.Store(time.Now().UnixNano()) }

// took is called by the loop when it has taken in a message.
func (w *watch) took(cursor uint64) {
	w.cursor.Store(cursor)
	w.mu.Lock()
	defer w.mu.Unlock()
	if w.taken != nil {
		close(w.taken)
		w.taken = nil
	}
}

// wrote is called by the clock after each write, and returns the error of the
// one before.
func (w *watch) wrote(err error) (before error) {
	var now *error
	if err != nil {
		now = &err
	}
	if old := w.failed.Swap(now); old != nil {
		return *old
	}
	return nil
}

// look is called by the loop when time has moved on, and after each save.
func (w *watch) look() {
	k := w.daemon.keeper
	c := k.engine.Counts()
	s := &sight{}
	s.Snapshot = metrics.Snapshot{
		Stands: map[finding.Level]int{}, Observations: c.Observations, Held: c.Held, LastTick: k.engine.Now(),
		Told: map[finding.Kind]uint64{}, BookSaves: k.saves, BookSaveTook: k.saveTook,
	}
	for kind, n := range c.Told {
		s.Told[kind] = n
	}
	var deficits, used []float64
	for _, v := range k.engine.Stands() {
		level := finding.Level("")
		if v.Account != nil {
			deficits = append(deficits, float64(v.Account.Today.Deficit))
			if v.Account.Limit().Known() {
				used = append(used, 1-v.Account.Left())
			}
			if _, blind := v.Account.Blind(); blind {
				s.BlindStands++
			}
			level = v.Account.Level()
		}
		s.Stands[level]++
		if w.daemon.invented {
			s.stores = append(s.stores, storeLine(v, level))
		}
	}
	s.Deficit, s.Used = metrics.SpreadOf(deficits), metrics.SpreadOf(used)
	w.seen.Store(s)
}

// storeLine is one line on one stand's store.
func storeLine(v engine.View, level finding.Level) string {
	name := v.Setup.Info.Name
	if v.Account == nil {
		return fmt.Sprintf("%-14s no rain data yet", name)
	}
	limit := v.Account.Limit()
	if !limit.Known() {
		return fmt.Sprintf("%-14s deficit %4.0f mm, limit %s", name, float64(v.Account.Today.Deficit), limit.Basis)
	}
	words := ""
	if level != "" {
		words = ", " + string(level)
	}
	return fmt.Sprintf("%-14s deficit %4.0f mm of %4.0f mm%s   (limit: %s)", name, float64(v.Account.Today.Deficit), float64(limit.Value), words, limit.Basis)
}

// caughtUp is called by the loop when it has been at the stream's end.
func (w *watch) caughtUp() {
	if !w.caught.Swap(true) {
		w.look()
		w.daemon.log.Info().Dur("after_ms", time.Since(w.started)).Msg("ready")
	}
}

// read is what a scrape shows.
func (w *watch) read() metrics.Snapshot {
	s := w.seen.Load().Snapshot
	ctx, cancel := context.WithTimeout(context.Background(), time.Second)
	defer cancel()
	s.StreamBytes = map[string]uint64{}
	for _, stream := range []string{broker.Observations, broker.Held, broker.Alerts, broker.BooksStream} {
		state, err := w.daemon.broker.State(ctx, stream)
		if err != nil {
			continue // a scrape shows what there is; /readyz says what is wrong
		}
		s.StreamBytes[stream] = state.Bytes
		if cursor := w.cursor.Load(); stream == broker.Observations && state.Last > cursor {
			s.CursorLag = state.Last - cursor
		}
	}
	for _, c := range w.couriers {
		st := c.Status()
		s.Destinations = append(s.Destinations, metrics.Destination{
			Name: st.Destination, Pending: st.Pending, Dead: st.Dead, OldestPending: st.OldestPending, LastSuccess: st.LastSuccess,
		})
	}
	return s
}

// stuckAfter is how long the loop may be silent: it turns every few seconds
// at the least, and a large load or re-settling may keep it for some minutes.
// Common practice of the trade, no source.
const stuckAfter = 5 * time.Minute

func (w *watch) alive() error {
	if quiet := time.Since(time.Unix(0, w.turnedAt.Load())); quiet > stuckAfter {
		return fmt.Errorf("the loop has not turned for %s", quiet.Round(time.Second))
	}
	return nil
}

func (w *watch) ready() metrics.Readiness {
	var r metrics.Readiness
	if err := w.alive(); err != nil {
		r.Unready = append(r.Unready, err.Error())
	}
	if !w.caught.Load() {
		r.Unready = append(r.Unready, "still taking in what was stored before")
	}
	if err := w.failed.Load(); err != nil {
		r.Unready = append(r.Unready, "the last tick could not be stored: "+(*err).Error())
	}
	ctx, cancel := context.WithTimeout(context.Background(), 2*time.Second)
	defer cancel()
	if err := w.daemon.broker.Ping(ctx); err != nil {
		r.Unready = append(r.Unready, err.Error())
	}
	for _, c := range w.couriers {
		if st := c.Status(); st.Dead > 0 {
			r.Degraded = append(r.Degraded, fmt.Sprintf("destination %s has %d messages it could not deliver", st.Destination, st.Dead))
		} else if st.Pending > 0 && time.Since(st.OldestPending) > time.Hour {
			r.Degraded = append(r.Degraded, fmt.Sprintf("destination %s has %d messages waiting since %s", st.Destination, st.Pending, st.OldestPending.Format(time.RFC3339)))
		}
	}
	return r
}

// handler answers /metrics, /healthz and /readyz.
func (w *watch) handler() (http.Handler, error) {
	reg := prometheus.NewRegistry()
	if _, err := metrics.New(reg, metrics.Options{Build: build(), Start: w.started, Read: w.read}); err != nil {
		return nil, err
	}
	return metrics.Handler(reg, metrics.Checks{Alive: w.alive, Ready: w.ready}), nil
}

// serve is the actor that answers.
func (w *watch) serve(ctx context.Context) error {
	handler, err := w.handler()
	if err != nil {
		return err
	}
	l, err := net.Listen("tcp", w.daemon.cfg.HTTP.Listen)
	if err != nil {
		return exitWith(exitConfiguration, fmt.Errorf("serve /metrics: %w; set http.listen to a free address", err))
	}
	w.mu.Lock()
	w.listener = l.Addr()
	w.mu.Unlock()
	w.daemon.log.Info().Str("address", l.Addr().String()).Msg("serving /metrics, /healthz and /readyz")
	server := metrics.Server(handler)
	ended := make(chan error, 1)
	go func() { ended <- server.Serve(l) }()
	select {
	case err := <-ended:
		return fmt.Errorf("serve /metrics: %w", err)
	case <-ctx.Done():
	}
	stop, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	err = server.Shutdown(stop)
	if errors.Is(err, context.DeadlineExceeded) {
		err = server.Close() // a client that does not go is no failure of the daemon
	}
	if e := <-ended; !errors.Is(e, http.ErrServerClosed) {
		err = errors.Join(err, e)
	}
	return err
}

func build() metrics.BuildInfo {
	b := metrics.BuildInfo{Version: version(), GoVersion: runtime.Version()}
	if info, ok := debug.ReadBuildInfo(); ok {
		for _, s := range info.Settings {
			if s.Key == "vcs.revision" {
				b.Revision = s.Value
			}
		}
	}
	return b
}

// address is where it serves, once it does.
func (w *watch) address() string {
	w.mu.Lock()
	defer w.mu.Unlock()
	if w.listener == nil {
		return w.daemon.cfg.HTTP.Listen
	}
	return w.listener.String()
}

// waitFor waits until the loop has taken in a message.
func (w *watch) waitFor(ctx context.Context, seq uint64) error {
	for {
		w.mu.Lock()
		if w.taken == nil {
			w.taken = make(chan struct{})
		}
		taken := w.taken
		w.mu.Unlock()
		if w.cursor.Load() >= seq {
			return nil
		}
		select {
		case <-taken:
		case <-ctx.Done():
			return ctx.Err()
		case <-time.After(time.Minute):
			return fmt.Errorf("message %d was not taken in within a minute", seq)
		}
	}
}

// waitDelivered waits until no destination has anything waiting.
func (w *watch) waitDelivered(ctx context.Context, most time.Duration) error {
	ctx, cancel := context.WithTimeout(ctx, most)
	defer cancel()
	state, err := w.daemon.broker.State(ctx, broker.Alerts)
	if err != nil {
		return err
	}
	for {
		waiting := false
		for _, c := range w.couriers {
			st := c.Status()
			waiting = waiting || st.Pending > 0 || st.Cursor < state.Last
		}
		if !waiting {
			return nil
		}
		select {
		case <-ctx.Done():
			return fmt.Errorf("some messages were not delivered within %s", most)
		case <-time.After(50 * time.Millisecond):
		}
	}
}

// levels is a line a stand on its store.
func (w *watch) levels() []string { return w.seen.Load().stores }

// summary is one line on all stores.
func (w *watch) summary() string {
	s := w.seen.Load()
	var words []string
	for _, l := range []finding.Level{finding.Spent, finding.NearlySpent, finding.Low, finding.DrawingDown} {
		if n := s.Stands[l]; n > 0 {
			words = append(words, fmt.Sprintf("%d %s", n, l))
		}
	}
	if len(words) == 0 {
		return "no store is drawing down"
	}
	return "stores: " + strings.Join(words, ", ")
}
