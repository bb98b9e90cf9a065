package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"saprolite/cmd/saprolite/demo"
	"saprolite/cmd/saprolite/engine"
	"saprolite/ingest/broker"
	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// home is a folder with both files, and the daemon that lives in it.
type home struct {
	t    *testing.T
	file string // saprolite.yaml
}

func newHome(t *testing.T, stands, more string) *home {
	t.Helper()
	dir := filepath.Dir(stands)
	return &home{t, write(t, dir, "saprolite.yaml", "place: Corrow\nstands: "+filepath.Base(stands)+`
broker:
  embedded: {listen: "127.0.0.1:0", max_store: 256MiB, durability: relaxed}
http: {listen: "127.0.0.1:0"}
`+more)}
}

// live runs the daemon, its ticks invented, while work goes on.
func (h *home) live(work func(d *daemon, feed *broker.Broker)) {
	h.t.Helper()
	cfg, reg, err := readBoth(h.file)
	if err != nil {
		h.t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	defer cancel()
	d, err := openDaemon(ctx, cfg, reg, zerolog.Nop())
	if err != nil {
		h.t.Fatal(err)
	}
	d.invented = true
	ended := make(chan error, 1)
	go func() { ended <- d.run(ctx) }()
	feed, err := broker.Attach(ctx, cfg.Data)
	if err != nil {
		h.t.Fatal(err)
	}
	work(d, feed)
	if err := feed.Close(ctx); err != nil {
		h.t.Error(err)
	}
	cancel()
	if err := <-ended; err != nil {
		h.t.Fatalf("the daemon ended with: %v", err)
	}
}

// daily opens the books that were kept and writes the daily file.
func (h *home) daily() string {
	h.t.Helper()
	d := h.opened(nil)
	var out bytes.Buffer
	err := errors.Join(d.keeper.engine.WriteDaily(&out, quantity.NoDay), d.close())
	if err != nil {
		h.t.Fatal(err)
	}
	return out.String()
}

func publish(t *testing.T, to *broker.Broker, subject string, list []observation.Observation) {
	t.Helper()
	data, err := wire.EncodeSenML(list)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := to.Publish(t.Context(), subject, nil, data); err != nil {
		t.Fatal(err)
	}
}

func tick(t *testing.T, d *daemon, to *broker.Broker, now time.Time) {
	t.Helper()
	seq, err := to.Publish(t.Context(), engine.TickSubject, nil, engine.EncodeTick(now))
	if err == nil {
		err = d.watch.waitFor(t.Context(), seq)
	}
	if err != nil {
		t.Fatal(err)
	}
}

// The same history pushed live, as SenML through broker, daybook and stand,
// gives the daily file of the hindcast, byte for byte; the daemon is stopped
// and started on the way.
func TestLiveEqualsHindcast(t *testing.T) {
	dir := t.TempDir()
	stands, history := seattleFiles(t, dir, `, "storage_limit_mm": 500`)
	dailyFile := filepath.Join(dir, "daily.csv")
	if code, _, errs := call(t, "hindcast", "--stands", stands, "--history", history, "--daily", dailyFile); code != 0 {
		t.Fatal(errs)
	}

	const offset = -8 * time.Hour // longitude / 15, rounded
	days := map[quantity.Day][]observation.Observation{}
	f, err := os.Open(history)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r, err := wire.NewCSVReader(f, history)
	if err != nil {
		t.Fatal(err)
	}
	for {
		o, err := r.Next()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		o = o.In(offset)
		day := quantity.DayOf(o.Start, offset)
		o.Start, o.Flag = o.End, observation.NotEvaluated // SenML has an end, the register the interval
		days[day] = append(days[day], o)
	}
	first, last := quantity.DateOf(2012, time.January, 1), quantity.DateOf(2015, time.December, 31)
	h := newHome(t, stands, "")
	push := func(from, to quantity.Day) {
		h.live(func(d *daemon, feed *broker.Broker) {
			for day := from; day <= to; day++ {
				publish(t, feed, "obs.station.seattle", days[day])
				tick(t, d, feed, day.End(offset).Add(closingHour))
			}
		})
	}
	push(first, first+500)
	push(first+501, last)
	if got, want := h.daily(), read(t, dailyFile); got != want {
		t.Errorf("the daily files differ: %s", firstDifference(want, got))
	}
}

const closingHour = 6 * time.Hour

// firstDifference names the first line in which two texts differ.
func firstDifference(want, got string) string {
	w, g := strings.Split(want, "\n"), strings.Split(got, "\n")
	for i := range min(len(w), len(g)) {
		if w[i] != g[i] {
			return fmt.Sprintf("line %d\nwant %s\n got %s", i+1, w[i], g[i])
		}
	}
	return fmt.Sprintf("%d lines, want %d", len(g), len(w))
}

// The demonstration runs through, tells what it should, and its live years,
// late data and all, give the same account as a hindcast over everything.
func TestDemo(t *testing.T) {
	dir := t.TempDir()
	code, out, errs := call(t, "demo", "--fast", "--dir", dir)
	if code != 0 {
		t.Fatalf("exit %d: %s\n%s", code, errs, out)
	}
	for _, want := range []string{"invented", "store-low: spent", "store-low: ended", "feed-silent: blind", "posts/001.json", "saprolite show"} {
		if !strings.Contains(out, want) {
			t.Errorf("the demo does not say %q:\n%s", want, out)
		}
	}
	mails, err := filepath.Glob(filepath.Join(dir, "mails", "*.eml"))
	if err != nil || len(mails) == 0 {
		t.Fatalf("%d mails, %v", len(mails), err)
	}
	if mail := read(t, mails[0]); !strings.Contains(mail, "Message-ID: <sap-") || !strings.Contains(mail, "dead limbs fall") || !strings.Contains(mail, "EXERCISE") {
		t.Errorf("the first mail is no mail of ours:\n%s", mail)
	}

	history := filepath.Join(dir, "all.csv")
	writeIsland(t, history)
	daily := filepath.Join(dir, "daily.csv")
	if code, _, errs := call(t, "hindcast", "--stands", filepath.Join(dir, "stands.geojson"), "--history", history, "--daily", daily); code != 0 {
		t.Fatal(errs)
	}
	h := &home{t, filepath.Join(dir, "saprolite.yaml")}
	if got, want := h.daily(), read(t, daily); got != want {
		t.Errorf("the daily files differ: %s", firstDifference(want, got))
	}

	t.Run("show", func(t *testing.T) {
		code, out, errs := call(t, "show", "mossgate", "--config", h.file)
		if code != 0 || !strings.Contains(out, "measured evapotranspiration") || !strings.Contains(out, "account of 2056-12-31") {
			t.Errorf("exit %d\n%s%s", code, out, errs)
		}
	})
}

// writeIsland writes all the invented observations as one history.
func writeIsland(t *testing.T, name string) {
	t.Helper()
	f, err := os.Create(name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	w := wire.NewCSVWriter(f)
	island := demo.NewIsland()
	for d := demo.FirstPast; d <= demo.LastLive; d++ {
		for _, source := range island.Next() {
			for _, o := range source.Observations {
				if err := w.Write(o); err != nil {
					t.Fatal(err)
				}
			}
		}
	}
	if err := w.Flush(); err != nil {
		t.Fatal(err)
	}
}

// What was loaded twice, or into a store without a daemon, is there once.
func TestLoadAndShow(t *testing.T) {
	dir := t.TempDir()
	stands, history := seattleFiles(t, dir, "")
	h := newHome(t, stands, "")
	if code, out, errs := call(t, "show", "seattle", "--config", h.file); code != 0 || !strings.Contains(out, "no account yet") {
		t.Fatalf("show before the load: exit %d\n%s%s", code, out, errs)
	}
	for range 2 { // the second time it says nothing new
		if code, out, errs := call(t, "load", history, "--config", h.file); code != 0 || !strings.Contains(out, "observations/s") {
			t.Fatalf("load: exit %d\n%s%s", code, out, errs)
		}
	}
	dailyFile := filepath.Join(dir, "daily.csv")
	if code, _, errs := call(t, "hindcast", "--stands", stands, "--history", history, "--daily", dailyFile); code != 0 {
		t.Fatal(errs)
	}
	loaded := strings.Split(h.daily(), "\n")
	want := strings.Split(strings.TrimSuffix(read(t, dailyFile), "\n"), "\n")
	if len(loaded) < len(want) || !slices.Equal(loaded[:len(want)], want) {
		t.Errorf("loaded and hindcast differ: %s", firstDifference(strings.Join(want, "\n"), strings.Join(loaded, "\n")))
	}
	code, out, errs := call(t, "show", "seattle", "--config", h.file)
	if code != 0 || !strings.Contains(out, "complete years                    4") || !strings.Contains(out, "blind") {
		t.Errorf("show: exit %d\n%s%s", code, out, errs)
	}
}

// A correction without its own time of becoming known is said to change
// nothing, and replaces what is there with --correct, both ways.
func TestCorrect(t *testing.T) {
	dir := t.TempDir()
	stands, history := seattleFiles(t, dir, "")
	h := newHome(t, stands, "")
	wrong := write(t, dir, "wrong.csv", "source,quantity,start,value,unit\nseattle,precipitation,2015-12-30,99,mm\n")
	right := write(t, dir, "right.csv", "source,quantity,start,value,unit\nseattle,precipitation,2015-12-30,0,mm\n")
	deficit := func() string {
		for line := range strings.Lines(h.daily()) {
			if strings.HasPrefix(line, "seattle,2015-12-31,") {
				return strings.Split(line, ",")[8]
			}
		}
		t.Fatal("no row of 2015-12-31")
		return ""
	}
	load := func(args ...string) string {
		code, out, errs := call(t, append([]string{"load", "--config", h.file}, args...)...)
		if code != 0 {
			t.Fatalf("load %v: exit %d\n%s%s", args, code, out, errs)
		}
		return out
	}
	load(history)
	before := deficit()
	load(wrong, "--correct")
	if deficit() == before {
		t.Error("the correction changed nothing")
	}
	load(right, "--correct")
	if got := deficit(); got != before {
		t.Errorf("corrected back: deficit %s, want %s", got, before)
	}
	if out := load(history); !strings.Contains(out, "precipitation") {
		t.Errorf("load does not say what it loaded:\n%s", out)
	}
	if out := load(wrong); !strings.Contains(out, "changed nothing: 1") || deficit() != before {
		t.Errorf("an outdated value: deficit %s, want %s\n%s", deficit(), before, out)
	}
}
