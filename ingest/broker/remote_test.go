package broker

import (
	"net"
	"os"
	"path/filepath"
	"strconv"
	"testing"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nkeys"
	"github.com/rs/zerolog"
)

// remoteServer is a NATS server as somebody else runs it.
func remoteServer(t *testing.T, o server.Options) *server.Server {
	t.Helper()
	if o.Port == 0 {
		o.Port = server.RANDOM_PORT
	}
	o.Host, o.JetStream, o.NoSigs, o.NoLog = "127.0.0.1", true, true, true
	s, err := server.NewServer(&o)
	if err != nil {
		t.Fatal(err)
	}
	s.Start()
	if !s.ReadyForConnections(within) {
		t.Fatal("remote server does not start")
	}
	t.Cleanup(func() { s.Shutdown(); s.WaitForShutdown() })
	return s
}

func file(t *testing.T, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "credentials")
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestRemoteWithPasswordAndNkey(t *testing.T) {
	pair, err := nkeys.CreateUser()
	if err != nil {
		t.Fatal(err)
	}
	seed, err := pair.Seed()
	if err != nil {
		t.Fatal(err)
	}
	public, err := pair.PublicKey()
	if err != nil {
		t.Fatal(err)
	}
	s := remoteServer(t, server.Options{
		StoreDir: t.TempDir(),
		Users:    []*server.User{{Username: "sap", Password: "a:b c"}},
		Nkeys:    []*server.NkeyUser{{Nkey: public}},
	})
	o := Options{Dir: t.TempDir(), Log: zerolog.Nop(), Remote: &Remote{URLs: []string{s.ClientURL()}, Credentials: file(t, "sap:a:b c\n")}}
	b := open(t, o)
	seq := publish(t, b, "obs.north.gauge", "1")
	k := books(t, b)
	if _, err := k.Save(t.Context(), []Entry{{Key: "head.a", ExpectRev: rev(0)}, {Key: "cursor", ExpectRev: rev(0)}}); err != nil {
		t.Error(err)
	}
	l, err := b.Load(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for range 10 {
		if err := l.Add("obs.north.gauge", nil, []byte("x")); err != nil {
			t.Fatal(err)
		}
	}
	if err := l.Flush(); err != nil {
		t.Fatal(err)
	}
	if err := b.Ping(t.Context()); err != nil {
		t.Error(err)
	}
	if _, err := os.Stat(filepath.Join(o.Dir, accessName)); err == nil {
		t.Error("a remote broker wrote an operator file")
	}

	// A command beside the daemon; and a second daemon is kept out.
	_, err = Open(t.Context(), o)
	isCode(t, err, InUse)
	o.Remote = &Remote{URLs: []string{s.ClientURL()}, Credentials: file(t, string(seed))}
	command, err := OpenOrAttach(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	defer shut(t, command)
	all := collect(t, command, Following{Stream: Observations, After: seq}, 10)
	if all[0].Seq != seq+1 {
		t.Errorf("first sequence %d, want %d", all[0].Seq, seq+1)
	}
}

func TestRemoteFailures(t *testing.T) {
	s := remoteServer(t, server.Options{StoreDir: t.TempDir(), Users: []*server.User{{Username: "sap", Password: "secret"}}})
	try := func(r Remote, want Code) {
		t.Helper()
		_, err := Open(t.Context(), Options{Remote: &r, Log: zerolog.Nop()})
		isCode(t, err, want)
	}
	url := []string{s.ClientURL()}
	try(Remote{URLs: url, Credentials: file(t, "sap:wrong")}, Refused)
	try(Remote{URLs: url}, Refused)
	try(Remote{URLs: url, Credentials: file(t, "no colon")}, Invalid)
	try(Remote{URLs: url, Credentials: file(t, "SUnoseed")}, Invalid)
	try(Remote{URLs: url, Credentials: filepath.Join(t.TempDir(), "missing")}, Invalid)
	try(Remote{URLs: []string{"nats://127.0.0.1:1"}}, Unreachable)
	try(Remote{URLs: url, Credentials: file(t, "sap:secret"), Replicas: 3}, Failed)
}

// The remote server goes away and comes back on the same port with its store:
// what follows must go on, what publishes must say that it cannot.
func TestRemoteServerRestarts(t *testing.T) {
	store := t.TempDir()
	s := remoteServer(t, server.Options{StoreDir: store})
	url := s.ClientURL()
	port := s.Addr().String()
	b := open(t, Options{Log: zerolog.Nop(), Remote: &Remote{URLs: []string{url}}})
	g := follow(t, b, Following{Stream: Observations})
	publish(t, b, "obs.north.gauge", "before")
	g.until(t, "the first message", g.has(1))
	s.Shutdown()
	s.WaitForShutdown()
	_, err := b.Publish(t.Context(), "obs.north.gauge", nil, []byte("meanwhile"))
	if e := isCode(t, err, Unreachable); !e.Temporary() {
		t.Errorf("%v is not temporary", e)
	}
	isCode(t, b.Ping(t.Context()), Unreachable)

	again := remoteServer(t, server.Options{StoreDir: store, Port: portOf(t, port)})
	if again.Addr().String() != port {
		t.Fatalf("restarted on %s, not %s", again.Addr(), port)
	}
	l, err := b.Load(t.Context())
	for err != nil { // until the client is connected again
		l, err = b.Load(t.Context())
	}
	if err := l.Add("obs.north.gauge", nil, []byte("after")); err != nil {
		t.Fatal(err)
	}
	if err := l.Flush(); err != nil {
		t.Fatal(err)
	}
	g.until(t, "the message after the restart", g.has(2))
	if g.data[0] != "before" || g.data[1] != "after" || g.gap() != nil {
		t.Errorf("got %v, notices %v", g.data, g.notices)
	}
}

func TestNoPasswordInAnAddress(t *testing.T) {
	for url, want := range map[string]string{
		"nats://sap:s@cret@host:4222,tls://other:4222": "nats://host:4222,tls://other:4222",
		"token@host": "nats://host",
		"host:4222":  "nats://host:4222",
	} {
		if got := withoutPassword(url); got != want {
			t.Errorf("%s: %s, want %s", url, got, want)
		}
	}
}

func portOf(t *testing.T, address string) int {
	t.Helper()
	_, port, err := net.SplitHostPort(address)
	if err != nil {
		t.Fatal(err)
	}
	n, err := strconv.Atoi(port)
	if err != nil {
		t.Fatal(err)
	}
	return n
}
