package broker

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"io/fs"
	"net"
	"os"
	"path/filepath"
	"runtime"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
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

func TestAttach(t *testing.T) {
	o := small(t)
	_, err := Attach(t.Context(), o.Dir)
	isCode(t, err, NotRunning)

	b := open(t, o)
	info, err := os.Stat(filepath.Join(o.Dir, accessName))
	if err != nil {
		t.Fatal(err)
	}
	if info.Mode().Perm() != 0o600 {
		t.Errorf("operator file has mode %v, want 0600", info.Mode())
	}
	a, err := OpenOrAttach(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	seq := publish(t, a, "obs.north.gauge", "from another command")
	if m, ok, err := b.Last(t.Context(), Observations, "obs.north.gauge"); err != nil || !ok || m.Seq != seq {
		t.Errorf("daemon does not see what the command published: %+v %v %v", m, ok, err)
	}
	if err := a.Ping(t.Context()); err != nil {
		t.Error(err)
	}
	shut(t, a)
	if err := b.Ping(t.Context()); err != nil {
		t.Errorf("daemon after a command detached: %v", err)
	}

	// A killed daemon leaves its file behind.
	stale, err := os.ReadFile(filepath.Join(o.Dir, accessName))
	if err != nil {
		t.Fatal(err)
	}
	shut(t, b)
	if _, err := os.Stat(filepath.Join(o.Dir, accessName)); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("operator file after close: %v", err)
	}
	if err := os.WriteFile(filepath.Join(o.Dir, accessName), stale, 0o600); err != nil {
		t.Fatal(err)
	}
	_, err = Attach(t.Context(), o.Dir)
	isCode(t, err, NotRunning)

	// Another daemon may listen there by now.
	other := open(t, small(t))
	var old access
	if err := json.Unmarshal(stale, &old); err != nil {
		t.Fatal(err)
	}
	old.URL = other.URL()
	if err := old.write(o.Dir); err != nil {
		t.Fatal(err)
	}
	_, err = Attach(t.Context(), o.Dir)
	isCode(t, err, NotRunning)

	own, err := OpenOrAttach(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	defer shut(t, own)
	if m, ok, err := own.Last(t.Context(), Observations, "obs.north.gauge"); err != nil || !ok || m.Seq != seq {
		t.Errorf("store opened by the command: %+v %v %v", m, ok, err)
	}
}

func TestAttachRefusesAnotherServer(t *testing.T) {
	b := open(t, small(t))
	a, err := readAccess(b.dir)
	if err != nil {
		t.Fatal(err)
	}
	a.Server = "saprolite-of-another-day"
	dir := t.TempDir()
	if err := a.write(dir); err != nil {
		t.Fatal(err)
	}
	_, err = Attach(t.Context(), dir)
	isCode(t, err, NotRunning)
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

func TestUsersMayOnlyWhatIsTheirs(t *testing.T) {
	o := small(t)
	o.Feeds = []Feed{{Name: "north", Token: "north-secret-token"}, {Name: "south", Token: "south-secret-token"}}
	log := &syncBuffer{}
	o.Log = zerolog.New(log).Level(zerolog.TraceLevel)
	b := open(t, o)

	dial := func(user, password string) (*nats.Conn, chan error, error) {
		denied := make(chan error, 10)
		nc, err := nats.Connect(b.URL(), nats.UserInfo(user, password), nats.CustomInboxPrefix("_INBOX_"+user),
			nats.NoReconnect(), nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) { denied <- err }))
		return nc, denied, err
	}
	nc, denied, err := dial("north", "north-secret-token")
	if err != nil {
		t.Fatal(err)
	}
	defer nc.Close()
	if reply, err := nc.Request("obs.north.gauge", []byte("7"), within); err != nil || !strings.Contains(string(reply.Data), Observations) {
		t.Errorf("a feed's own observation: %v %v", reply, err)
	}
	for _, subject := range []string{"obs.south.gauge", "clock.tick", "alert.oak-1.store-low", "held.north.gauge", "$KV.BOOKS.head.oak-1", "$JS.API.INFO", "obs.north"} {
		if err := nc.Publish(subject, []byte("x")); err != nil {
			t.Fatal(err)
		}
		select {
		case err := <-denied:
			if !errors.Is(err, nats.ErrPermissionViolation) {
				t.Errorf("%s: %v", subject, err)
			}
		case <-time.After(within):
			t.Errorf("%s: publishing was not refused", subject)
		}
	}
	for _, subject := range []string{"obs.>", "_INBOX_south.>", "_INBOX.>", ">"} {
		if _, err := nc.SubscribeSync(subject); err != nil {
			t.Fatal(err)
		}
		select {
		case <-denied:
		case <-time.After(within):
			t.Errorf("%s: subscribing was not refused", subject)
		}
	}
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != 1 {
		t.Errorf("%d messages stored, want 1 (%v)", s.Messages, err)
	}

	if _, _, err := dial("south", "north-secret-token"); !errors.Is(err, nats.ErrAuthorization) {
		t.Errorf("wrong token: %v", err)
	}
	if _, err := nats.Connect(b.URL()); !errors.Is(err, nats.ErrAuthorization) {
		t.Errorf("nobody: %v", err)
	}
	// The daemon's own user, even with its password, only inside the process.
	s, err := startServer(t.Context(), Options{Dir: t.TempDir(), Listen: "127.0.0.1:0"}, "test", leastStore, "known", "operator")
	if err != nil {
		t.Fatal(err)
	}
	defer func() { s.Shutdown(); s.WaitForShutdown() }()
	if c, err := nats.Connect("", nats.InProcessServer(s), nats.UserInfo(daemonUser, "known")); err != nil {
		t.Errorf("daemon inside the process: %v", err)
	} else {
		c.Close()
	}
	if _, err := nats.Connect(s.ClientURL(), nats.UserInfo(daemonUser, "known")); !errors.Is(err, nats.ErrAuthorization) {
		t.Errorf("daemon over TCP: %v, want an authorization error", err)
	}

	a, err := readAccess(o.Dir)
	if err != nil {
		t.Fatal(err)
	}
	nc.Close()
	shut(t, b)
	for _, secret := range []string{"north-secret-token", "south-secret-token", a.Password} {
		if strings.Contains(log.String(), secret) {
			t.Error("a secret is in the log")
		}
	}
	if log.String() == "" {
		t.Error("the server logged nothing: the check for secrets saw nothing")
	}
}

func TestStreamsAreSetUpAndKept(t *testing.T) {
	o := small(t)
	b := open(t, o)
	for range 2 {
		for name, want := range map[string]struct {
			atomic   bool
			max      int64
			discard  jetstream.DiscardPolicy
			subjects string
		}{
			Observations: {true, 128 * mib, jetstream.DiscardNew, "obs.>,clock.>"},
			Held:         {false, 256 * mib / 20, jetstream.DiscardOld, "held.>"},
			Alerts:       {false, -1, jetstream.DiscardNew, "alert.>"},
			BooksStream:  {true, 256 * mib / 20 * 7, jetstream.DiscardNew, "$KV.BOOKS.>"},
		} {
			info, err := b.info(t.Context(), name)
			if err != nil {
				t.Fatal(err)
			}
			c := info.Config
			near := c.MaxBytes == want.max || want.max > 0 && want.max-c.MaxBytes < 20 // shares are whole twentieths
			if c.AllowAtomicPublish != want.atomic || !near || c.Discard != want.discard || strings.Join(c.Subjects, ",") != want.subjects {
				t.Errorf("%s: %+v", name, c)
			}
		}
		shut(t, b)
		b = open(t, o)
	}
}

func TestStoreGrowsAndShrinks(t *testing.T) {
	o := small(t)
	for _, size := range []int64{256 * mib, 1024 * mib, 128 * mib, leastStore} {
		o.MaxStore = size
		b := open(t, o)
		publish(t, b, "obs.north.gauge", strings.Repeat("x", 1000))
		s, err := b.State(t.Context(), Observations)
		if err != nil {
			t.Fatal(err)
		}
		if want := size / 20 * 10; s.MaxBytes != want {
			t.Errorf("store of %d MiB: OBSERVATIONS may take %d bytes, want %d", size/mib, s.MaxBytes, want)
		}
		shut(t, b)
	}
	b := open(t, o)
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != 4 {
		t.Errorf("%d messages, want 4 (%v)", s.Messages, err)
	}
}

func TestRoomIsCappedBelowTheDisk(t *testing.T) {
	dir := t.TempDir()
	free, known, err := freeDisk(dir)
	if err != nil {
		t.Fatal(err)
	}
	if !known {
		t.Fatal("the free disk is not known on this system; the daemon is meant for systems where it is")
	}
	got, err := roomFor(dir, 1<<62)
	if err != nil {
		t.Fatal(err)
	}
	if got >= free || got < free/2 {
		t.Errorf("room %d with %d free: want below it, and most of it", got, free)
	}
	if got, err := roomFor(dir, leastStore); err != nil || got != leastStore {
		t.Errorf("room %d (%v), want the wished %d", got, err, leastStore)
	}
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
