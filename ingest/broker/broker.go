package broker

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/rs/zerolog"
)

// Broker is a connection to the store and, when embedded, the store itself.
// Its methods may be called from many goroutines.
type Broker struct {
	nc     *nats.Conn
	js     jetstream.JetStream
	server *server.Server // nil: not ours
	lock   *folderLock    // nil: not held
	dir    string
	url    string
	gone   chan struct{} // closed when the connection is closed for good

	mu      sync.Mutex
	streams map[string]jetstream.Stream // handles, by name

	closing sync.Once
	closed  error
}

const (
	connectWithin = 5 * time.Second // to one server; common practice of the trade, no source
	answerWithin  = 5 * time.Second // one request; nats.go's own default for JetStream
	pingWithin    = 2 * time.Second // common practice of the trade, no source
)

// Open takes the lock on the data folder, starts the embedded server or
// connects to the remote one, and creates or updates the streams.
//
// Codes: Invalid (options, folder), InUse, Full (no room on the disk),
// Failed (server, with its own words), Unreachable and Refused (remote).
func Open(ctx context.Context, o Options) (*Broker, error) {
	if err := o.check(); err != nil {
		return nil, err
	}
	b := &Broker{dir: o.Dir}
	if err := b.open(ctx, o); err != nil {
		if undo := b.Close(context.WithoutCancel(ctx)); undo != nil {
			err = errors.Join(err, undo)
		}
		return nil, err
	}
	return b, nil
}

func (b *Broker) open(ctx context.Context, o Options) (err error) {
	if o.Dir != "" {
		if b.lock, err = lockFolder(o.Dir); err != nil {
			return err
		}
	}
	if o.Remote != nil {
		if err := b.connectRemote(ctx, o); err != nil {
			return err
		}
		return b.ensureStreams(ctx, layout(o.MaxStore, o.Remote.Replicas))
	}

	if err := removeAccess(o.Dir); err != nil { // of a daemon that was killed
		return err
	}
	room, err := roomFor(o.Dir, o.maxStore())
	if err != nil {
		return err
	}
	name := "saprolite-" + strings.ToLower(rand.Text())
	operator := rand.Text()
	if err := b.startEmbedded(ctx, o, name, room, operator); err != nil {
		return err
	}
	err = b.ensureStreams(ctx, layout(room, 1))
	if errors.Is(err, ErrFull) {
		err = b.shrink(ctx, o, name, room, operator, err)
	}
	if err != nil {
		return err
	}
	if o.Listen == "" {
		return nil
	}
	b.url = b.server.ClientURL()
	return access{URL: b.url, Server: name, User: operatorUser, Password: operator}.write(o.Dir)
}

// startEmbedded starts the server and connects to it inside the process.
func (b *Broker) startEmbedded(ctx context.Context, o Options, name string, room int64, operator string) (err error) {
	daemon := rand.Text()
	if b.server, err = startServer(ctx, o, name, room, daemon, operator); err != nil {
		return err
	}
	return b.connect(o.Log, "", nats.InProcessServer(b.server), nats.UserInfo(daemonUser, daemon))
}

// shrink makes the streams smaller when the store's limit is below what they
// have reserved: the server refuses even that while it is over its limit, so
// it is started once with the old limit. The streams keep to the new one; the
// server does from its next start.
func (b *Broker) shrink(ctx context.Context, o Options, name string, room int64, operator string, cause error) error {
	account, err := b.js.AccountInfo(ctx)
	if err != nil {
		return wrap("making the store smaller", err)
	}
	reserved := int64(account.ReservedStore)
	if reserved <= room {
		return cause
	}
	if err := b.stop(ctx); err != nil {
		return err
	}
	if err := b.startEmbedded(ctx, o, name, reserved, operator); err != nil {
		return err
	}
	return b.ensureStreams(ctx, layout(room, 1))
}

func (b *Broker) connectRemote(ctx context.Context, o Options) error {
	var options []nats.Option
	who, err := credentials(o.Remote.Credentials)
	if err != nil {
		return err
	}
	if who != nil {
		options = append(options, who)
	}
	if err := ctx.Err(); err != nil {
		return wrap("connecting", err)
	}
	b.url = strings.Join(o.Remote.URLs, ",")
	return b.connect(o.Log, b.url, options...)
}

func (b *Broker) connect(log zerolog.Logger, url string, options ...nats.Option) error {
	op := "connecting to the embedded server"
	if url != "" {
		op = "connecting to " + withoutPassword(url)
	}
	gone := make(chan struct{})
	nc, err := nats.Connect(url, append(options,
		nats.Name("saprolite"),
		nats.Timeout(connectWithin),
		nats.MaxReconnects(-1),      // a remote server comes back some day
		nats.ReconnectBufSize(-1),   // what cannot be sent now is an error now, not a surprise later
		nats.IgnoreAuthErrorAbort(), // credentials may be mended while we wait
		nats.ClosedHandler(func(*nats.Conn) { close(gone) }),
		nats.DisconnectErrHandler(func(_ *nats.Conn, err error) {
			if err != nil {
				log.Warn().Err(err).Msg("connection to the broker lost, trying again")
			}
		}),
		nats.ReconnectHandler(func(*nats.Conn) { log.Info().Msg("connection to the broker is back") }),
		nats.ErrorHandler(func(_ *nats.Conn, _ *nats.Subscription, err error) {
			log.Warn().Err(err).Msg("broker connection")
		}),
	)...)
	if err != nil {
		return wrap(op, err)
	}
	b.nc, b.gone = nc, gone
	b.js, err = jetstream.New(nc, jetstream.WithDefaultTimeout(answerWithin))
	return wrap(op, err)
}

// withoutPassword is a list of URLs fit for a message.
func withoutPassword(urls string) string {
	all := strings.Split(urls, ",")
	for i, u := range all {
		scheme, rest, ok := strings.Cut(u, "://")
		if !ok {
			scheme, rest = "nats", u
		}
		if at := strings.LastIndexByte(rest, '@'); at >= 0 {
			rest = rest[at+1:]
		}
		all[i] = scheme + "://" + rest
	}
	return strings.Join(all, ",")
}

// Attach connects to the daemon that runs on the data folder dir. It changes
// nothing there. Code NotRunning when there is none, or when it listens on
// no address.
func Attach(ctx context.Context, dir string) (*Broker, error) {
	a, err := readAccess(dir)
	if err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, wrap("attaching", err)
	}
	b := &Broker{dir: dir, url: a.URL}
	if err := b.connect(zerolog.Nop(), a.URL, nats.UserInfo(a.User, a.Password)); err != nil {
		if errors.Is(err, ErrUnreachable) || errors.Is(err, nats.ErrNoServers) || errors.Is(err, ErrRefused) {
			// The file of a daemon that was killed: nobody listens, or somebody else does.
			return nil, &Error{Code: NotRunning, Op: "attaching to the daemon at " + a.URL, Err: err}
		}
		return nil, err
	}
	if b.nc.ConnectedServerName() != a.Server {
		err := &Error{Code: NotRunning, Op: "attaching to the daemon at " + a.URL, Err: errors.New("another server answers there")}
		return nil, errors.Join(err, b.Close(ctx))
	}
	return b, nil
}

// OpenOrAttach attaches to the running daemon, or opens the store when none
// runs. A daemon that is just starting is waited for until ctx ends or 10 s
// have passed. A remote store is opened without the lock when a daemon holds
// it.
func OpenOrAttach(ctx context.Context, o Options) (*Broker, error) {
	if err := o.check(); err != nil {
		return nil, err
	}
	if o.Remote != nil {
		b, err := Open(ctx, o)
		if errors.Is(err, ErrInUse) {
			o.Dir = ""
			b, err = Open(ctx, o)
		}
		return b, err
	}
	// A start reads at most some seconds of index (10 million messages after a
	// crash: 4 s, measured).
	deadline := time.Now().Add(10 * time.Second)
	for {
		b, err := Attach(ctx, o.Dir)
		if !errors.Is(err, ErrNotRunning) {
			return b, err
		}
		b, err = Open(ctx, o)
		if !errors.Is(err, ErrInUse) || time.Now().After(deadline) {
			return b, err
		}
		if pause(ctx, 100*time.Millisecond) != nil {
			return nil, err
		}
	}
}

// Attached tells whether another process owns the store: a running daemon.
func (b *Broker) Attached() bool { return b.lock == nil }

// URL is where the broker can be reached, empty when only inside this process.
func (b *Broker) URL() string { return withoutPassword(b.url) }

// Ping asks JetStream for its account and returns nil when it answers within
// two seconds. It does not show that the disk takes writes: publish a canary
// for that.
func (b *Broker) Ping(ctx context.Context) error {
	ctx, cancel := context.WithTimeout(ctx, pingWithin)
	defer cancel()
	_, err := b.js.AccountInfo(ctx)
	return b.wrap("asking the broker whether it is well", err)
}

// Close ends everything: it lets requests on their way finish until ctx ends,
// closes the connection, stops an embedded server and waits for it, removes
// the operator's file and releases the lock. Follow returns with code Closed.
// A second call returns what the first did.
func (b *Broker) Close(ctx context.Context) error {
	b.closing.Do(func() {
		var all []error
		if b.server != nil {
			all = append(all, removeAccess(b.dir)) // first, so that nobody attaches any more
		}
		all = append(all, b.stop(ctx))
		if err := b.lock.release(); err != nil {
			all = append(all, folderError("releasing the lock", filepath.Join(b.dir, lockName), err))
		}
		b.closed = errors.Join(all...)
	})
	return b.closed
}

// stop drains the connection and ends the server.
func (b *Broker) stop(ctx context.Context) (err error) {
	if b.nc != nil {
		if b.nc.Drain() == nil {
			select {
			case <-b.gone:
			case <-ctx.Done():
				err = wrap("draining the connection", fmt.Errorf("%w; it was cut", context.Cause(ctx)))
			}
		}
		b.nc.Close()
		<-b.gone
	}
	if b.server != nil {
		b.server.Shutdown()
		b.server.WaitForShutdown()
	}
	return err
}

// wrap is the package's wrap; a closed Broker says so.
func (b *Broker) wrap(op string, err error) error {
	if err != nil && b.nc.IsClosed() {
		return &Error{Code: Closed, Op: op, Err: err}
	}
	return wrap(op, err)
}

// pause waits, or returns the context's error.
func pause(ctx context.Context, d time.Duration) error {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}
