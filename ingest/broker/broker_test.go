package broker

import (
	"bytes"
	"context"
	"errors"
	"net"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/nats-io/nats.go/jetstream"
	"github.com/rs/zerolog"
)

// within bounds every wait of a test; it is never waited for when all is well.
const within = 20 * time.Second

func small(t testing.TB) Options {
	return Options{Dir: t.TempDir(), Listen: "127.0.0.1:0", MaxStore: 256 * mib, Durability: Relaxed, Log: zerolog.Nop()}
}

func open(t testing.TB, o Options) *Broker {
	t.Helper()
	b, err := Open(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := b.Close(context.Background()); err != nil {
			t.Errorf("closing: %v", err)
		}
	})
	return b
}

func shut(t testing.TB, b *Broker) {
	t.Helper()
	if err := b.Close(context.Background()); err != nil {
		t.Fatalf("closing: %v", err)
	}
}

func publish(t testing.TB, b *Broker, subject, data string) uint64 {
	t.Helper()
	seq, err := b.Publish(t.Context(), subject, nil, []byte(data))
	if err != nil {
		t.Fatal(err)
	}
	return seq
}

func isCode(t testing.TB, err error, code Code) *Error {
	t.Helper()
	var e *Error
	if !errors.As(err, &e) || e.Code != code {
		t.Fatalf("got error %v, want code %s", err, code)
	}
	return e
}

func TestRestartKeepsEverything(t *testing.T) {
	for _, d := range []Durability{Strict, Relaxed} {
		o := small(t)
		o.Durability = d
		b := open(t, o)
		var want []uint64
		for i := range 20 {
			want = append(want, publish(t, b, "obs.north.gauge", strconv.Itoa(i)))
		}
		publish(t, b, "held.north.gauge", "unit?")
		publish(t, b, "alert.oak-1.store-low", "low")
		books, err := b.Books(t.Context())
		if err != nil {
			t.Fatal(err)
		}
		rev, err := books.Put(t.Context(), "head.oak-1", []byte("state"))
		if err != nil {
			t.Fatal(err)
		}
		before, err := b.State(t.Context(), Observations)
		if err != nil {
			t.Fatal(err)
		}
		shut(t, b)

		b = open(t, o)
		after, err := b.State(t.Context(), Observations)
		if err != nil {
			t.Fatal(err)
		}
		if after != before {
			t.Errorf("state after restart %+v, before %+v", after, before)
		}
		if after.Messages != 20 || after.Last != want[19] {
			t.Errorf("got %d messages up to %d, want 20 up to %d", after.Messages, after.Last, want[19])
		}
		for stream, subject := range map[string]string{Held: "held.north.gauge", Alerts: "alert.oak-1.store-low"} {
			if _, ok, err := b.Last(t.Context(), stream, subject); !ok || err != nil {
				t.Errorf("%s: last of %s: found %v, error %v", stream, subject, ok, err)
			}
		}
		if books, err = b.Books(t.Context()); err != nil {
			t.Fatal(err)
		}
		data, got, ok, err := books.Get(t.Context(), "head.oak-1")
		if err != nil || !ok || got != rev || string(data) != "state" {
			t.Errorf("book after restart: %q revision %d found %v error %v", data, got, ok, err)
		}
		shut(t, b)
	}
}

func TestSecondOpenIsInUseAndNamesTheProcess(t *testing.T) {
	o := small(t)
	b := open(t, o)
	_, err := Open(t.Context(), o)
	if e := isCode(t, err, InUse); e.Pid != os.Getpid() {
		t.Errorf("pid %d, want %d", e.Pid, os.Getpid())
	}
	if !errors.Is(err, ErrInUse) || !strings.Contains(err.Error(), strconv.Itoa(os.Getpid())) {
		t.Errorf("error %q", err)
	}
	// The failed attempt must not have harmed the first.
	publish(t, b, "obs.north.gauge", "1")
	a, err := Attach(t.Context(), o.Dir)
	if err != nil {
		t.Fatalf("attaching after a failed second open: %v", err)
	}
	shut(t, a)
	shut(t, b)
	open(t, o)
}

func TestStartFailures(t *testing.T) {
	busy, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer busy.Close()
	file := filepath.Join(t.TempDir(), "file")
	if err := os.WriteFile(file, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	blocked := t.TempDir()
	if err := os.WriteFile(filepath.Join(blocked, "jetstream"), []byte("not a folder"), 0o600); err != nil {
		t.Fatal(err)
	}
	for name, c := range map[string]struct {
		o    Options
		code Code
		says []string
	}{
		"port in use":       {Options{Dir: t.TempDir(), Listen: busy.Addr().String()}, Failed, []string{busy.Addr().String(), "address already in use", "choose another port"}},
		"folder is a file":  {Options{Dir: file}, Invalid, []string{file, "may write to"}},
		"store is a file":   {Options{Dir: blocked}, Failed, []string{"jetstream", "writable"}},
		"several at once":   {Options{Listen: "0.0.0.0:4222", MaxStore: 1, Feeds: []Feed{{Name: "North"}, {Name: "a"}}}, Invalid, []string{"data folder", "loopback", "max_store", `"North"`, `"a" has no token`}},
		"remote and listen": {Options{Remote: &Remote{}, Listen: "127.0.0.1:4222"}, Invalid, []string{"no urls", "listens itself"}},
	} {
		_, err := Open(t.Context(), c.o)
		if err == nil {
			t.Errorf("%s: no error", name)
			continue
		}
		if e, ok := errors.AsType[*Error](err); !ok || e.Code != c.code {
			t.Errorf("%s: %v, want code %s", name, err, c.code)
		}
		for _, s := range c.says {
			if !strings.Contains(err.Error(), s) {
				t.Errorf("%s: %q does not say %q", name, err, s)
			}
		}
	}
	// Nothing is left locked.
	if err := os.Remove(filepath.Join(blocked, "jetstream")); err != nil {
		t.Fatal(err)
	}
	open(t, Options{Dir: blocked, MaxStore: 256 * mib})
}

func TestCloseLeavesNothingRunning(t *testing.T) {
	before := busy()
	b := open(t, small(t))
	ended := make(chan error, 1)
	arrived := make(chan Msg, 1)
	go func() {
		ended <- b.Follow(context.Background(), Following{Stream: Observations, Each: func(m Msg) error { arrived <- m; return nil }})
	}()
	publish(t, b, "obs.north.gauge", "1")
	<-arrived
	shut(t, b)
	select {
	case err := <-ended:
		isCode(t, err, Closed)
	case <-time.After(within):
		t.Fatal("Follow did not end when the broker was closed")
	}
	_, err := b.Publish(context.Background(), "obs.north.gauge", nil, nil)
	isCode(t, err, Closed)

	deadline := time.Now().Add(within)
	for busy() > before {
		if time.Now().After(deadline) {
			stack := make([]byte, 1<<20)
			t.Fatalf("goroutines left of %d: \n%s", busy(), stack[:runtime.Stack(stack, true)])
		}
		time.Sleep(10 * time.Millisecond)
	}
}

// busy counts the goroutines of server and client.
func busy() int {
	stack := make([]byte, 4<<20)
	stack = stack[:runtime.Stack(stack, true)]
	n := 0
	for g := range bytes.SplitSeq(stack, []byte("\n\n")) {
		if bytes.Contains(g, []byte("github.com/nats-io/")) {
			n++
		}
	}
	return n
}

type syncBuffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (s *syncBuffer) Write(p []byte) (int, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.b.Write(p)
}

func (s *syncBuffer) String() string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.b.String()
}

// Strict is worth its name: the server syncs before each acknowledgement, in
// every stream. Without that a power cut takes what was acknowledged, and
// nothing else here would notice.
func TestStrictSyncsBeforeItAcknowledges(t *testing.T) {
	for d, want := range map[Durability]bool{Strict: true, Relaxed: false} {
		o := small(t)
		o.Durability = d
		b := open(t, o)
		if got := b.server.JetStreamConfig().SyncAlways; got != want {
			t.Errorf("durability %d: the server syncs always: %v, want %v", d, got, want)
		}
		for _, name := range []string{Observations, Held, Alerts, BooksStream} {
			info, err := b.info(t.Context(), name)
			if err != nil {
				t.Fatal(err)
			}
			// Asynchronous persistence would switch the syncing off again
			// (nats-server v2.15.3, server/stream.go, setupStore).
			if got := info.Config.PersistMode; got != jetstream.DefaultPersistMode {
				t.Errorf("%s: persist mode %v, want the default", name, got)
			}
		}
		shut(t, b)
	}
	if (Options{}).Durability != Strict {
		t.Error("Strict is not the default")
	}
}
