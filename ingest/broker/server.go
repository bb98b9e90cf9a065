package broker

import (
	"context"
	"errors"
	"fmt"
	"net"
	"path/filepath"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/nats-io/jwt/v2"
	"github.com/nats-io/nats-server/v2/server"
	"github.com/rs/zerolog"
)

// The users of the embedded server. No feed can have these names: ids begin
// with a letter or digit (design 5.1).
const (
	daemonUser   = "_daemon"   // this process, inside only
	operatorUser = "_operator" // this program's other commands
)

const readyWithin = 30 * time.Second // listening and accepting, after the store was read; common practice of the trade, no source

// startServer runs an embedded server and returns when it accepts
// connections. The store below dir/jetstream is read before that.
func startServer(ctx context.Context, o Options, name string, maxStore int64, daemonToken, operatorToken string) (*server.Server, error) {
	const op = "starting the embedded server"
	opts := &server.Options{
		ServerName:             name,
		DontListen:             o.Listen == "",
		JetStream:              true,
		StoreDir:               filepath.Join(o.Dir, "jetstream"),
		JetStreamMaxStore:      maxStore,
		JetStreamMaxMemory:     64 * mib, // consumers only; 0 would mean 75 % of the machine
		MaxPayload:             maxBook,
		NoSigs:                 true, // else the server's own handler ends the process
		NoLog:                  true, // its own log file; ours is set below
		DisableJetStreamBanner: true,
		Users:                  users(o.Feeds, daemonToken, operatorToken),
	}
	switch o.Durability {
	case Strict:
		opts.SyncAlways = true
	case Relaxed:
		opts.SyncInterval = time.Second
	}
	if o.Listen != "" {
		host, port, err := net.SplitHostPort(o.Listen)
		if err != nil {
			return nil, invalid(op, "listen %q: %w", o.Listen, err)
		}
		opts.Host = host
		if opts.Port, err = strconv.Atoi(port); err != nil {
			return nil, invalid(op, "listen %q: port: expected a number", o.Listen)
		}
		if opts.Port == 0 {
			opts.Port = server.RANDOM_PORT
		}
	}
	s, err := server.NewServer(opts)
	if err != nil {
		return nil, &Error{Code: Failed, Op: op, Err: err}
	}
	log := &serverLog{to: o.Log, fatal: make(chan error, 1)}
	s.SetLoggerV2(log, false, false, false)
	s.Start()

	// A failed start is told through Fatalf only: the server would go on
	// running half, without its listener or without JetStream.
	deadline := time.Now().Add(readyWithin)
	for {
		select {
		case err = <-log.fatal:
			err = &Error{Code: Failed, Op: op, Err: err, Hint: startHint(err)}
		default:
			if s.ReadyForConnections(50 * time.Millisecond) {
				log.started()
				return s, nil
			}
			err = ctx.Err()
			if err == nil && time.Now().After(deadline) {
				err = errors.New("it does not accept connections")
			}
			if err != nil {
				err = wrap(op, err)
			}
		}
		if err != nil {
			s.Shutdown()
			s.WaitForShutdown()
			return nil, err
		}
	}
}

func startHint(err error) string {
	switch text := err.Error(); {
	case strings.Contains(text, "address already in use"):
		return "another program listens there; choose another port in broker.embedded.listen"
	case strings.Contains(text, "JetStream"):
		return "the data folder must be writable and hold nothing else under jetstream"
	}
	return ""
}

// users are who may connect. Passwords that are not bcrypt hashes live in
// memory only. A feed needs its own inbox besides its subjects: without it
// its messages are stored but it never hears so, and sends them again.
func users(feeds []Feed, daemonToken, operatorToken string) []*server.User {
	only := func(kinds ...string) map[string]struct{} {
		m := make(map[string]struct{}, len(kinds))
		for _, k := range kinds {
			m[k] = struct{}{}
		}
		return m
	}
	all := []*server.User{
		{Username: daemonUser, Password: daemonToken, AllowedConnectionTypes: only(jwt.ConnectionTypeInProcess)},
		{Username: operatorUser, Password: operatorToken, AllowedConnectionTypes: only(jwt.ConnectionTypeStandard)},
	}
	for _, f := range feeds {
		all = append(all, &server.User{
			Username: f.Name, Password: f.Token,
			AllowedConnectionTypes: only(jwt.ConnectionTypeStandard),
			Permissions: &server.Permissions{
				Publish:   &server.SubjectPermission{Allow: []string{"obs." + f.Name + ".>"}},
				Subscribe: &server.SubjectPermission{Allow: []string{"_INBOX_" + f.Name + ".>"}},
			},
		})
	}
	return all
}

// serverLog passes the server's log on, and keeps the first fatal message.
type serverLog struct {
	to    zerolog.Logger
	mu    sync.Mutex
	fatal chan error // nil after the start
}

func (l *serverLog) started() {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.fatal = nil
}

func (l *serverLog) Fatalf(format string, v ...any) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.fatal == nil {
		l.to.Error().Bool("fatal", true).Msgf(format, v...)
		return
	}
	select {
	case l.fatal <- fmt.Errorf(format, v...):
	default:
	}
}

func (l *serverLog) Warnf(format string, v ...any) {
	// The passwords are random, of this process, and never written but to the
	// operator's file; the server's advice to hash them is for its own files.
	if strings.HasPrefix(format, "Plaintext passwords") {
		return
	}
	l.to.Warn().Msgf(format, v...)
}

func (l *serverLog) Noticef(format string, v ...any) { l.to.Debug().Msgf(format, v...) }
func (l *serverLog) Errorf(format string, v ...any)  { l.to.Error().Msgf(format, v...) }
func (l *serverLog) Debugf(format string, v ...any)  { l.to.Trace().Msgf(format, v...) }
func (l *serverLog) Tracef(format string, v ...any)  { l.to.Trace().Msgf(format, v...) }
