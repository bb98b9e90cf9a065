package metrics

import (
	"fmt"
	"io"
	"net/http"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/promhttp"
)

// Readiness is what keeps the daemon from doing its job, and what makes it do
// it less well, each a sentence for the operator.
type Readiness struct {
	Unready  []string // any of these: 503
	Degraded []string // told, but still 200: a dead mail relay is no reason to restart
}

// Checks are asked by the health pages, from any goroutine; they must not
// block.
type Checks struct {
	Alive func() error     // nil while the loop turns; asks nothing of disk or network
	Ready func() Readiness // whether observations are stored and worked on
}

// Handler serves /metrics, /healthz and /readyz.
func Handler(reg *prometheus.Registry, c Checks) http.Handler {
	mux := http.NewServeMux()
	mux.Handle("GET /metrics", promhttp.HandlerFor(reg, promhttp.HandlerOpts{
		Registry:            reg,
		MaxRequestsInFlight: 4, // a scraper or two and a person; common practice of the trade, no source
		Timeout:             10 * time.Second,
		EnableOpenMetrics:   true,
	}))
	mux.HandleFunc("GET /healthz", func(w http.ResponseWriter, _ *http.Request) {
		if err := c.Alive(); err != nil {
			say(w, http.StatusServiceUnavailable, "not alive: "+err.Error())
			return
		}
		say(w, http.StatusOK, "alive")
	})
	mux.HandleFunc("GET /readyz", func(w http.ResponseWriter, _ *http.Request) {
		r := c.Ready()
		status, lines := http.StatusOK, []string{"ready"}
		if len(r.Unready) > 0 {
			status, lines = http.StatusServiceUnavailable, nil
		}
		for _, s := range r.Unready {
			lines = append(lines, "not ready: "+s)
		}
		for _, s := range r.Degraded {
			lines = append(lines, "degraded: "+s)
		}
		say(w, status, lines...)
	})
	return mux
}

func say(w http.ResponseWriter, status int, lines ...string) {
	w.Header().Set("Content-Type", "text/plain; charset=utf-8")
	w.Header().Set("X-Content-Type-Options", "nosniff")
	w.Header().Set("Cache-Control", "no-store")
	w.WriteHeader(status)
	for _, l := range lines {
		_, _ = io.WriteString(w, fmt.Sprintln(l)) // the reader has gone: nobody to tell
	}
}

// Server returns a server for h whose limits a slow or hostile client cannot
// stretch: the figures of reliability.md section 4, and a write limit above
// the scrape's own.
func Server(h http.Handler) *http.Server {
	return &http.Server{
		Handler:           h,
		ReadHeaderTimeout: 5 * time.Second,
		ReadTimeout:       30 * time.Second,
		WriteTimeout:      30 * time.Second,
		IdleTimeout:       60 * time.Second,
		MaxHeaderBytes:    8 << 10,
	}
}
