package broker

import (
	"encoding/json"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/rs/zerolog"
	"golang.org/x/crypto/bcrypt"
)

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

func TestUsersMayOnlyWhatIsTheirs(t *testing.T) {
	o := small(t)
	hash, err := bcrypt.GenerateFromPassword([]byte("west-secret-token"), bcrypt.MinCost)
	if err != nil {
		t.Fatal(err)
	}
	o.Feeds = []Feed{{Name: "north", Token: "north-secret-token"}, {Name: "south", Token: "south-secret-token"}, {Name: "west", Token: string(hash)}}
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
	if c, _, err := dial("west", "west-secret-token"); err != nil {
		t.Errorf("a feed known by the hash of its token: %v", err)
	} else {
		c.Close()
	}
	if _, _, err := dial("west", string(hash)); !errors.Is(err, nats.ErrAuthorization) {
		t.Errorf("the hash itself as token: %v", err)
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
	for _, secret := range []string{"north-secret-token", "south-secret-token", "west-secret-token", string(hash), a.Password} {
		if strings.Contains(log.String(), secret) {
			t.Error("a secret is in the log")
		}
	}
	if log.String() == "" {
		t.Error("the server logged nothing: the check for secrets saw nothing")
	}
}
