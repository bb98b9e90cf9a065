package config

import (
	"fmt"
	"strconv"
	"strings"
)

// Broker is where observations, alerts and books are kept: exactly one of the
// two is set.
type Broker struct {
	Embedded *Embedded
	Remote   *Remote
}

// Embedded is a NATS server inside the daemon.
type Embedded struct {
	Listen   string // host:port on loopback
	MaxStore int64  // bytes the store may grow to
	// Relaxed syncs once a second instead of before every acknowledgement
	// (nats.md section 3: up to 1 s is lost at a power cut, nothing at a crash).
	Relaxed bool
}

// Remote is a NATS server or cluster reached by URL.
type Remote struct {
	URLs        []string
	Credentials string // path of a NATS credentials file; empty for none
}

var sizeUnits = []struct {
	name  string
	bytes float64
}{
	// IEC 80000-13 binary prefixes first: "GiB" ends in "B" too.
	{"KiB", 1 << 10}, {"MiB", 1 << 20}, {"GiB", 1 << 30}, {"TiB", 1 << 40},
	{"kB", 1e3}, {"MB", 1e6}, {"GB", 1e9}, {"TB", 1e12},
}

// parseSize reads bytes from "8GiB" or "500 MB".
func parseSize(s string) (int64, error) {
	for _, u := range sizeUnits {
		digits, ok := strings.CutSuffix(s, u.name)
		if !ok {
			continue
		}
		v, err := strconv.ParseFloat(strings.TrimSpace(digits), 64)
		if err != nil || !(v > 0 && v*u.bytes < 1<<60) {
			break
		}
		return int64(v * u.bytes), nil
	}
	return 0, fmt.Errorf("%q is not a size", clip(s))
}

const sizeHelp = `write a number and a unit: "8GiB" (KiB, MiB, GiB, TiB; kB, MB, GB, TB)`

// storeSize wants a size large enough for a store.
func storeSize(s string) (string, string) {
	n, err := parseSize(s)
	if err != nil {
		return err.Error(), sizeHelp
	}
	if n < smallestStore {
		return fmt.Sprintf("%q is too small, want at least %dMiB", s, smallestStore>>20), "a year of a small forest needs that much"
	}
	return "", ""
}

// broker reads the section of that name.
func (l *loader) broker(top *section) Broker {
	s, _ := top.open("broker")
	embedded, hasEmbedded := s.open("embedded")
	remote, hasRemote := s.open("remote")
	if hasEmbedded && hasRemote {
		s.complainAt("remote", "both embedded and remote are given", "keep one of them")
	}
	var b Broker
	if hasEmbedded || !hasRemote {
		b.Embedded = l.embedded(embedded)
	}
	if hasRemote {
		b.Remote = l.remote(remote)
	}
	s.done()
	return b
}

func (l *loader) embedded(s *section) *Embedded {
	s.later = []string{"mqtt"}
	e := &Embedded{Listen: s.text("listen", DefaultListen, address, onLoopback), MaxStore: DefaultStore}
	if n := s.node.get("max_store"); n != nil && n.kind == number {
		s.take("max_store")
		s.complain(n.at, s.field("max_store"), fmt.Sprintf("want a size, got the number %v", n.number), sizeHelp)
	} else if size := s.text("max_store", "", storeSize); size != "" {
		e.MaxStore, _ = parseSize(size) // obeyed storeSize
	}
	e.Relaxed = s.text("durability", "strict", oneOf("strict", "relaxed")) == "relaxed"
	s.done()
	return e
}

func (l *loader) remote(s *section) *Remote {
	s.required("urls", `write urls: ["tls://broker.example.org:4222"]`)
	r := &Remote{URLs: s.texts("urls", natsURL)}
	if n := s.node.get("urls"); n != nil && n.kind == list && len(n.list()) == 0 {
		s.complainAt("urls", "none is listed", `write urls: ["tls://broker.example.org:4222"]`)
	}
	r.Credentials = l.existing(s, "credentials", "write the path of the .creds file the broker's operator gave you")
	s.done()
	return r
}
