package broker

import (
	"errors"
	"fmt"
	"net"
	"regexp"
	"strings"

	"github.com/rs/zerolog"
)

// Durability says when what was acknowledged is on the disk itself.
type Durability int

const (
	// Strict syncs before every acknowledgement: nothing acknowledged is lost
	// in a power cut. The default.
	Strict Durability = iota
	// Relaxed syncs once a second: a power cut may lose the last second, also
	// the one before a stop; a killed process loses nothing. For disks that
	// sync slowly.
	Relaxed
)

// Feed is a sender that may publish to the broker itself.
type Feed struct {
	Name string // its id: it may publish obs.<name>.> and nothing else
	// Token is its password, or the bcrypt hash of it ($2a$...), so that a
	// file need not hold the password.
	Token string
}

// Remote is a NATS server somewhere else.
type Remote struct {
	URLs []string
	// Credentials is the path of a file: a .creds file (JWT and seed), an nkey
	// seed, or one line "user:password". Empty: no credentials.
	Credentials string
	// Replicas of each stream, 1 when 0. Three or five need as many servers.
	Replicas int
}

// Options of a Broker. The zero value of a field is its default.
type Options struct {
	// Dir is the data folder. Embedded: required, created when missing.
	// Remote: only the lock lies there; empty means no lock.
	Dir string
	// Listen is the loopback address for feeds and for this program's other
	// commands, such as 127.0.0.1:4222; port 0 takes a free one. Empty:
	// reachable inside this process only.
	Listen string
	// MaxStore bounds everything stored, in bytes. 0 means 8 GiB. What is used
	// is capped below the free disk, because the server does not recover from
	// a full one without a restart.
	MaxStore   int64
	Durability Durability
	Feeds      []Feed
	Remote     *Remote        // nil: embedded
	Log        zerolog.Logger // what the server has to say
}

const (
	mib = 1 << 20
	gib = 1 << 30

	defaultMaxStore = 8 * gib // common practice of the trade, no source: a thousand stands with decades fit many times

	maxMessage = 1 * mib // a message of OBSERVATIONS, HELD, ALERTS, with its headers; packs and posts are below it (design 5.4)
	maxBook    = 8 * mib // a book; nats-server warns above 8 MiB (server/const.go, MAX_PAYLOAD_MAX_SIZE)
)

var idPattern = regexp.MustCompile(`^[a-z0-9][a-z0-9_-]{0,63}$`) // design 5.1

// check returns all mistakes at once.
func (o Options) check() error {
	var all []error
	bad := func(format string, args ...any) { all = append(all, fmt.Errorf(format, args...)) }

	if o.Remote == nil {
		if o.Dir == "" {
			bad("data folder is missing: name the folder that keeps the store")
		}
		if o.Listen != "" {
			if host, _, err := net.SplitHostPort(o.Listen); err != nil {
				bad("listen %q: expected host:port such as 127.0.0.1:4222", o.Listen)
			} else if ip := net.ParseIP(host); host != "localhost" && (ip == nil || !ip.IsLoopback()) {
				bad("listen %q: expected a loopback address such as 127.0.0.1:4222, because passwords would travel unencrypted; put a server with TLS before it, or use a remote broker", o.Listen)
			}
		}
	} else {
		if len(o.Remote.URLs) == 0 {
			bad("remote broker has no urls: expected one or more such as nats://host:4222")
		}
		if o.Listen != "" || len(o.Feeds) > 0 {
			bad("a remote broker listens itself and knows its own users: listen and feeds belong to its configuration")
		}
		if r := o.Remote.Replicas; r < 0 || r > 5 {
			bad("replicas %d: expected 1 to 5", r)
		}
	}
	if o.MaxStore < 0 || o.MaxStore > 0 && o.MaxStore < leastStore {
		bad("max_store %d bytes: expected at least %d (64 MiB)", o.MaxStore, int64(leastStore))
	}
	if o.Durability != Strict && o.Durability != Relaxed {
		bad("durability %d: expected Strict or Relaxed", o.Durability)
	}
	seen := map[string]bool{}
	for i, f := range o.Feeds {
		switch {
		case !idPattern.MatchString(f.Name):
			bad("feed %d: name %q: expected a small letter or digit, then up to 63 of a-z 0-9 _ -", i+1, f.Name)
		case seen[f.Name]:
			bad("feed %q is named twice", f.Name)
		case strings.TrimSpace(f.Token) == "":
			bad("feed %q has no token", f.Name)
		}
		seen[f.Name] = true
	}
	if err := errors.Join(all...); err != nil {
		return &Error{Code: Invalid, Op: "reading the options", Err: err}
	}
	return nil
}

func (o Options) maxStore() int64 {
	if o.MaxStore == 0 {
		return defaultMaxStore
	}
	return o.MaxStore
}
