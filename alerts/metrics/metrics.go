// Package metrics shows the daemon's state to Prometheus, and whether it is
// alive and ready.
//
// The program's state is never kept here: a Snapshot of it is read at each
// scrape. Only sums over the forest are shown, in base units (metres, seconds,
// bytes); for one stand ask the program itself. Units and names are linted in
// a test.
package metrics

import (
	"fmt"
	"math"
	"slices"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"

	"saprolite/detectors/finding"
)

// BuildInfo names the program that runs.
type BuildInfo struct{ Version, Revision, GoVersion string }

// Snapshot is the state of the daemon at one moment. The zero time and NaN
// mean "not known yet" and leave their metric out.
type Snapshot struct {
	// Stands by the level of their store: drawing down, low, nearly spent,
	// spent, and "" for all others. Their sum is the number of stands.
	Stands      map[finding.Level]int
	BlindStands int // of these, how many cannot be judged because their inputs stopped

	// Deficit and Used over all stands whose account runs, and whose limit is
	// known, respectively.
	Deficit Spread // of the storage deficit, mm
	Used    Spread // of deficit / limit, 1

	Observations uint64    // taken in since the start
	Held         uint64    // set aside with a reason since the start
	LastTick     time.Time // of the last tick worked on, by its own time

	StreamBytes map[string]uint64 // stored, by stream
	CursorLag   uint64            // messages in OBSERVATIONS that the loop has not worked on

	Told map[finding.Kind]uint64 // alert messages told since the start

	Destinations []Destination

	BookSaves    uint64        // times the books were saved since the start
	BookSaveTook time.Duration // all of them took together
}

// Spread is the median and the largest of one number over the stands; NaN when
// there are none.
type Spread struct{ Median, Largest float64 }

// Destination is the state of one destination's book.
type Destination struct {
	Name          string
	Pending       int
	Dead          int
	OldestPending time.Time // zero: nothing is pending
	LastSuccess   time.Time // zero: never
}

// kinds are the label values of alerts told that are there from the start, so
// that a rate over the first message can be taken.
var kinds = []finding.Kind{finding.StoreLow, finding.FeedSilent}

// levels are the levels of a store, with "" for none of them.
var levels = []finding.Level{"", finding.DrawingDown, finding.Low, finding.NearlySpent, finding.Spent}

// Options are what a Metrics needs.
type Options struct {
	Build BuildInfo
	Start time.Time        // when the program started
	Read  func() Snapshot  // called at each scrape, from any goroutine; must not block
	Now   func() time.Time // for ages; nil: time.Now
}

// Metrics is a prometheus.Collector over a Snapshot.
type Metrics struct {
	opts Options

	build, start                            *prometheus.Desc
	stands, blind, deficit, used            *prometheus.Desc
	observations, held, tick, bytes, lag    *prometheus.Desc
	told, saves                             *prometheus.Desc
	pending, dead, oldestPending, succeeded *prometheus.Desc
}

// New registers the metrics with reg, and with them those of the Go runtime
// and of the process. It returns an error when they are registered already or
// Read is missing.
func New(reg prometheus.Registerer, o Options) (*Metrics, error) {
	if o.Read == nil {
		return nil, fmt.Errorf("metrics: a function that reads the state is needed")
	}
	if o.Now == nil {
		o.Now = time.Now
	}
	desc := func(name, help string, labels ...string) *prometheus.Desc {
		return prometheus.NewDesc("saprolite_"+name, help, labels, nil)
	}
	m := &Metrics{
		opts:  o,
		build: desc("build_info", "The program that runs; always 1.", "version", "revision", "goversion"),
		start: desc("start_time_seconds", "When the program started, Unix time."),

		stands:  desc("stands", "Stands by the level of their stored water (none: not yet drawing down, or not known).", "level"),
		blind:   desc("blind_stands", "Stands that cannot be judged because their inputs have stopped."),
		deficit: desc("storage_deficit_meters", "Storage deficit over the stands, depth of water.", "statistic"),
		used:    desc("storage_used_ratio", "Storage deficit as a share of the storage limit over the stands whose limit is known.", "statistic"),

		observations: desc("observations_total", "Observations taken in."),
		held:         desc("observations_held_total", "Observations set aside with a reason."),
		tick:         desc("last_tick_timestamp_seconds", "Time of the last clock tick that was worked on, Unix time."),
		bytes:        desc("stream_bytes", "Bytes stored.", "stream"),
		lag:          desc("cursor_lag_messages", "Messages stored that have not been worked on."),
		told:         desc("alerts_told_total", "Alert messages told.", "kind"),
		saves:        desc("book_save_duration_seconds", "Time taken to save the books."),

		pending:       desc("destination_pending_messages", "Messages waiting for the destination.", "destination"),
		dead:          desc("destination_dead_messages", "Messages refused for good or given up.", "destination"),
		oldestPending: desc("destination_oldest_pending_age_seconds", "How long the longest waiting message has waited; 0 when none waits.", "destination"),
		succeeded:     desc("destination_last_success_timestamp_seconds", "When the destination last took a message, Unix time.", "destination"),
	}
	for _, c := range []prometheus.Collector{m,
		collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{})} {
		if err := reg.Register(c); err != nil {
			return nil, fmt.Errorf("metrics: %w", err)
		}
	}
	return m, nil
}

// Describe sends what Collect may send.
func (m *Metrics) Describe(ch chan<- *prometheus.Desc) {
	for _, d := range []*prometheus.Desc{m.build, m.start, m.stands, m.blind, m.deficit, m.used, m.observations, m.held,
		m.tick, m.bytes, m.lag, m.told, m.saves, m.pending, m.dead, m.oldestPending, m.succeeded} {
		ch <- d
	}
}

// Collect reads a Snapshot and sends it.
func (m *Metrics) Collect(ch chan<- prometheus.Metric) {
	s, now := m.opts.Read(), m.opts.Now()
	gauge := func(d *prometheus.Desc, v float64, labels ...string) {
		ch <- prometheus.MustNewConstMetric(d, prometheus.GaugeValue, v, labels...)
	}
	counter := func(d *prometheus.Desc, v uint64, labels ...string) {
		ch <- prometheus.MustNewConstMetric(d, prometheus.CounterValue, float64(v), labels...)
	}
	moment := func(d *prometheus.Desc, t time.Time, labels ...string) {
		if !t.IsZero() {
			gauge(d, unix(t), labels...)
		}
	}
	spread := func(d *prometheus.Desc, s Spread, unit float64) {
		for _, v := range []struct {
			statistic string
			value     float64
		}{{"median", s.Median}, {"largest", s.Largest}} {
			if !math.IsNaN(v.value) {
				gauge(d, v.value*unit, v.statistic)
			}
		}
	}

	gauge(m.build, 1, m.opts.Build.Version, m.opts.Build.Revision, m.opts.Build.GoVersion)
	moment(m.start, m.opts.Start)

	for _, l := range levels {
		name := string(l)
		if name == "" {
			name = "none"
		}
		gauge(m.stands, float64(s.Stands[l]), name)
	}
	gauge(m.blind, float64(s.BlindStands))
	spread(m.deficit, s.Deficit, metresPerMillimetre)
	spread(m.used, s.Used, 1)

	counter(m.observations, s.Observations)
	counter(m.held, s.Held)
	moment(m.tick, s.LastTick)
	for stream, n := range s.StreamBytes {
		gauge(m.bytes, float64(n), stream)
	}
	gauge(m.lag, float64(s.CursorLag))
	for _, k := range kinds {
		counter(m.told, s.Told[k], string(k))
	}
	for k, n := range s.Told {
		if !slices.Contains(kinds, k) {
			counter(m.told, n, string(k))
		}
	}
	ch <- prometheus.MustNewConstSummary(m.saves, s.BookSaves, s.BookSaveTook.Seconds(), nil)

	for _, d := range s.Destinations {
		gauge(m.pending, float64(d.Pending), d.Name)
		gauge(m.dead, float64(d.Dead), d.Name)
		age := 0.0
		if !d.OldestPending.IsZero() {
			age = max(0, now.Sub(d.OldestPending).Seconds())
		}
		gauge(m.oldestPending, age, d.Name)
		moment(m.succeeded, d.LastSuccess, d.Name)
	}
}

const metresPerMillimetre = 1e-3

// SpreadOf is the median and the largest of values, NaN passed over. It does
// not change values.
func SpreadOf[T ~float64](values []T) Spread {
	known := make([]float64, 0, len(values))
	for _, v := range values {
		if !math.IsNaN(float64(v)) {
			known = append(known, float64(v))
		}
	}
	n := len(known)
	if n == 0 {
		return Spread{math.NaN(), math.NaN()}
	}
	slices.Sort(known)
	return Spread{Median: (known[(n-1)/2] + known[n/2]) / 2, Largest: known[n-1]}
}

func unix(t time.Time) float64 { return float64(t.UnixNano()) / float64(time.Second) }
