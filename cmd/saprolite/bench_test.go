package main

import (
	"bufio"
	"bytes"
	"context"
	"fmt"
	"io/fs"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"saprolite/ingest/broker"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// forest writes a register of n invented stands, each with its own gauge and
// thermometer, and years of invented daily history for them.
func forest(tb testing.TB, dir string, n, years int) (settings, history string, rows int) {
	tb.Helper()
	var stands strings.Builder
	stands.WriteString(`{"type": "FeatureCollection", "features": [` + "\n")
	for i := range n {
		if i > 0 {
			stands.WriteString(",\n")
		}
		fmt.Fprintf(&stands, `{"type": "Feature", "id": "stand-%d", "geometry": {"type": "Point", "coordinates": [%.3f, 41.5]}, "properties": {"name": "Stand %d"}}`,
			i, -30+float64(i%1000)/1000, i)
	}
	stands.WriteString("\n]}\n")
	settings = filepath.Join(dir, "saprolite.yaml")
	history = filepath.Join(dir, "history.csv")
	file, err := os.Create(history)
	if err != nil {
		tb.Fatal(err)
	}
	out := bufio.NewWriterSize(file, 1<<20)
	w := wire.NewCSVWriter(out)
	first := quantity.DateOf(2006, time.January, 1)
	for i := range n {
		id := "stand-" + strconv.Itoa(i)
		r := rand.New(rand.NewPCG(uint64(i), 3))
		for d := first; d < first+quantity.Day(years*365); d++ {
			winter := math.Cos(2 * math.Pi * (float64(d.YearDay()) - 20) / 365)
			rain := 0.0
			if r.Float64() < 0.3+0.2*winter {
				rain = math.Round(r.ExpFloat64()*90) / 10
			}
			mean := 12 - 9*winter + 3*r.NormFloat64()
			for q, v := range map[quantity.Quantity]float64{
				quantity.Precipitation: rain, quantity.AirTemperatureMin: math.Round(mean*10-50) / 10, quantity.AirTemperatureMax: math.Round(mean*10+50) / 10,
			} {
				o := observation.Observation{Source: id, Quantity: q, Start: d.Start(0), End: d.End(0), WholeDays: true, Value: v, SD: math.NaN(), Flag: observation.NotEvaluated}
				if err := w.Write(o); err != nil {
					tb.Fatal(err)
				}
				rows++
			}
		}
	}
	for _, err := range []error{w.Flush(), out.Flush(), file.Close(),
		os.WriteFile(filepath.Join(dir, "stands.geojson"), []byte(stands.String()), 0o644),
		os.WriteFile(settings, []byte("broker: {embedded: {listen: \"127.0.0.1:0\", max_store: 16GiB}}\nhttp: {listen: \"127.0.0.1:0\"}\n"), 0o644)} {
		if err != nil {
			tb.Fatal(err)
		}
	}
	return settings, history, rows
}

// BenchmarkLoad loads ten stands with twenty years (219,000 observations)
// beside what the broker alone does with the same messages, both synced to
// disk before they are acknowledged.
func BenchmarkLoad(b *testing.B) {
	dir := b.TempDir()
	settings, history, rows := forest(b, dir, 10, 20)
	cfg, reg, err := readBoth(settings)
	if err != nil {
		b.Fatal(err)
	}
	opened, err := broker.Open(b.Context(), brokerOptions(cfg, zerolog.Nop()))
	if err != nil {
		b.Fatal(err)
	}
	defer opened.Close(context.Background())
	report := func(b *testing.B) {
		b.ReportMetric(float64(rows)*float64(b.N)/b.Elapsed().Seconds(), "observations/s")
	}
	var sent []broker.Msg
	b.Run("load", func(b *testing.B) {
		for b.Loop() {
			l := &loading{reg: reg, to: opened, errs: os.Stderr, packs: map[string]*pack{}}
			if err := l.loadFiles(b.Context(), []string{history}, new(bytes.Buffer)); err != nil {
				b.Fatal(err)
			}
			if l.left > 0 {
				b.Fatalf("%d rows left out", l.left)
			}
		}
		report(b)
	})
	stop := fmt.Errorf("enough")
	opened.Follow(b.Context(), broker.Following{Stream: broker.Observations, Each: func(m broker.Msg) error {
		sent = append(sent, m)
		if len(sent) == (rows+packRows-1)/packRows || m.Pending == 0 {
			return stop
		}
		return nil
	}})
	b.Run("broker", func(b *testing.B) {
		for b.Loop() {
			batches, err := opened.Load(b.Context())
			if err != nil {
				b.Fatal(err)
			}
			for _, m := range sent {
				if err := batches.Add(m.Subject, map[string]string{"Content-Type": "text/csv"}, m.Data); err != nil {
					b.Fatal(err)
				}
			}
			if err := batches.Flush(); err != nil {
				b.Fatal(err)
			}
		}
		report(b)
	})
}

// BenchmarkForest loads and settles a forest with twenty years of history and
// reports what it weighs, and how soon the daemon is ready again. 20 stands,
// or SAPROLITE_STANDS of them:
//
//	SAPROLITE_STANDS=1000 go test ./cmd/saprolite -run '^$' -bench Forest -benchtime 1x -timeout 1h
func BenchmarkForest(b *testing.B) {
	n := 20
	if s := os.Getenv("SAPROLITE_STANDS"); s != "" {
		var err error
		if n, err = strconv.Atoi(s); err != nil {
			b.Fatal(err)
		}
	}
	const years = 20
	for b.Loop() {
		dir := b.TempDir()
		settings, history, rows := forest(b, dir, n, years)
		began := time.Now()
		if code := saprolite(b.Context(), []string{"load", history, "--config", settings}, nil, os.Stderr, os.Stderr); code != 0 {
			b.Fatalf("load ended with %d", code)
		}
		b.ReportMetric(time.Since(began).Seconds(), "load-and-settle-s")
		b.ReportMetric(float64(rows), "observations")
		b.ReportMetric(float64(folderSize(b, filepath.Join(dir, "saprolite-data")))/1e6, "data-MB")

		cfg, reg, err := readBoth(settings)
		if err != nil {
			b.Fatal(err)
		}
		runtime.GC()
		debug.FreeOSMemory()
		ctx, cancel := context.WithCancel(b.Context())
		began = time.Now()
		d, err := openDaemon(ctx, cfg, reg, zerolog.Nop())
		if err != nil {
			b.Fatal(err)
		}
		ended := make(chan error, 1)
		go func() { ended <- d.run(ctx) }()
		for !d.watch.caught.Load() {
			time.Sleep(time.Millisecond)
		}
		b.ReportMetric(time.Since(began).Seconds()*1000, "ready-ms")
		debug.FreeOSMemory()
		b.ReportMetric(float64(resident(b))/1e6, "resident-MB")
		cancel()
		if err := <-ended; err != nil {
			b.Fatal(err)
		}
	}
}

func folderSize(tb testing.TB, dir string) (n int64) {
	err := filepath.WalkDir(dir, func(_ string, e fs.DirEntry, err error) error {
		if err != nil || e.IsDir() {
			return err
		}
		info, err := e.Info()
		n += info.Size()
		return err
	})
	if err != nil {
		tb.Fatal(err)
	}
	return n
}

// resident is the memory the process holds, where the system tells.
func resident(tb testing.TB) int64 {
	data, err := os.ReadFile("/proc/self/statm")
	if err != nil {
		tb.Logf("resident memory is not known here: %v", err)
		return 0
	}
	pages, err := strconv.ParseInt(strings.Fields(string(data))[1], 10, 64)
	if err != nil {
		tb.Fatal(err)
	}
	return pages * int64(os.Getpagesize())
}
