// Package webhook posts alert messages to an HTTP address as CloudEvents 1.0
// (structured JSON), signed as Standard Webhooks 1.0.0.
//
// Use New for a destination that posts, and Event alone where the body is to
// be looked at. Do not use it to call anything that is not under the
// operator's hand: it refuses private addresses unless they are listed, and it
// follows no redirect.
package webhook

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"net/netip"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"time"

	"saprolite/alerts"
)

const (
	// timeout and bodyLimit are Standard Webhooks 1.0.0: 15 to 30 s, and a body
	// below 20 kB.
	timeout   = 30 * time.Second
	bodyLimit = 20_000

	answerShown = 200 // bytes of a refusing answer that go into the error: enough for a sentence
)

// Options are the settings of one webhook destination.
type Options struct {
	Name   string // the destination's, [a-z0-9][a-z0-9_-]{0,63}
	URL    string // https; http only to this machine
	Secret string // whsec_ and 24 to 64 bytes in base64; empty: not signed
	Source string // CloudEvents source, a URI reference such as /saprolite/hollin-forest

	// AllowPrivate lists the private networks the webhook may reach, such as
	// 10.1.0.0/16; each within one of RFC 1918, 4193 or 6598. The host of URL is judged by the address it resolves to at
	// the moment of dialling. This machine needs no entry when URL names it by
	// number or as localhost.
	AllowPrivate []netip.Prefix

	Transport func(*http.Transport) // may change the transport, such as its trusted roots; nil: as it is
	Now       func() time.Time      // nil: time.Now
}

// Destination posts alert messages.
type Destination struct {
	opts   Options
	host   string // shown in errors instead of the URL, which may hold a token
	key    []byte
	client *http.Client
}

// New checks the options, all of them at once, and returns a destination. It
// does not connect.
func New(o Options) (*Destination, error) {
	if o.Now == nil {
		o.Now = time.Now
	}
	d := &Destination{opts: o}
	var errs []error
	bad := func(format string, args ...any) {
		errs = append(errs, fmt.Errorf("webhook destination %s: %w", o.Name, fmt.Errorf(format, args...)))
	}
	u, err := url.Parse(o.URL)
	local := false
	switch {
	case err != nil || u.Hostname() == "" || (u.Scheme != "https" && u.Scheme != "http"):
		bad("url: expected an address such as https://hooks.example.org/alerts") // not shown: it may hold a token
	default:
		d.host, local = u.Host, isLocal(u.Hostname())
		if u.Scheme == "http" && !local {
			bad("url: http is allowed only to this machine (127.0.0.1, ::1 or localhost), not to %s; use https", u.Host)
		}
		if u.User != nil {
			bad("url: name and password in the address are not supported; use a secret")
		}
	}
	if o.Secret != "" {
		if d.key, err = decodeSecret(o.Secret); err != nil {
			bad("%w", err)
		}
	}
	if s, err := url.Parse(o.Source); err != nil || o.Source == "" || s.String() != o.Source {
		bad("source %q: expected a URI reference such as /saprolite/hollin-forest", o.Source)
	}
	for _, p := range o.AllowPrivate {
		if !within(private, p) {
			bad("allow_private: %s is no private network; expected one within %s", p, list(private))
		}
	}
	if len(errs) > 0 {
		return nil, errors.Join(errs...)
	}
	t := &http.Transport{
		Proxy: nil, // a proxy would dial for us, past the check of the address
		DialContext: (&net.Dialer{Timeout: timeout, ControlContext: func(_ context.Context, _, address string, _ syscall.RawConn) error {
			return checkAddress(address, local, o.AllowPrivate)
		}}).DialContext,
		TLSHandshakeTimeout:    timeout,
		MaxIdleConns:           1,
		IdleConnTimeout:        time.Minute,
		ForceAttemptHTTP2:      true,
		MaxResponseHeaderBytes: 64 << 10,
	}
	if o.Transport != nil {
		o.Transport(t)
	}
	d.client = &http.Client{
		Transport:     t,
		Timeout:       timeout,
		CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse },
	}
	return d, nil
}

// Name is the destination's name.
func (d *Destination) Name() string { return d.opts.Name }

// Deliver posts m and returns nil on a 2xx answer. Its errors are
// *alerts.Undeliverable: permanent for 3xx, for 4xx other than 408, 425 and
// 429, and for a message too large to post; temporary, with the wait the
// receiver asked for, for the rest. A receiver tells copies by webhook-id, so
// a missing answer is temporary, not unknown.
func (d *Destination) Deliver(ctx context.Context, m alerts.Message) error {
	body, err := Event(m, d.opts.Source)
	if err != nil {
		return &alerts.Undeliverable{Permanent: true, Err: err}
	}
	if len(body) >= bodyLimit {
		return &alerts.Undeliverable{Permanent: true,
			Err: fmt.Errorf("message %s is %d bytes long; a webhook takes less than %d", m.MessageID(), len(body), bodyLimit)}
	}
	req, err := http.NewRequestWithContext(ctx, http.MethodPost, d.opts.URL, bytes.NewReader(body))
	if err != nil {
		return &alerts.Undeliverable{Permanent: true, Err: fmt.Errorf("posting to %s: %w", d.host, withoutURL(err))}
	}
	req.Header.Set("Content-Type", "application/cloudevents+json; charset=utf-8")
	req.Header.Set("User-Agent", "saprolite")
	now := d.opts.Now()
	req.Header.Set("webhook-id", m.MessageID()) // without a secret too: by it a receiver tells copies (design 5.7)
	req.Header.Set("webhook-timestamp", strconv.FormatInt(now.Unix(), 10))
	if d.key != nil {
		req.Header.Set("webhook-signature", sign(d.key, m.MessageID(), now, body))
	}
	res, err := d.client.Do(req)
	if err != nil {
		return &alerts.Undeliverable{Err: fmt.Errorf("posting to %s: %w", d.host, withoutURL(err))}
	}
	defer res.Body.Close()
	said, _ := io.ReadAll(io.LimitReader(res.Body, answerShown))
	if res.StatusCode/100 == 2 {
		return nil
	}
	fail := &alerts.Undeliverable{Err: fmt.Errorf("%s answered %s: %q", d.host, res.Status, strings.TrimSpace(string(said)))}
	switch code := res.StatusCode; {
	case code == http.StatusRequestTimeout, code == http.StatusTooEarly, code == http.StatusTooManyRequests, code >= 500:
		fail.RetryAfter = retryAfter(res.Header.Get("Retry-After"), d.opts.Now())
	default:
		fail.Permanent = true
	}
	return fail
}

// retryAfter reads the header, seconds or a date (RFC 9110 section 10.2.3); 0
// when it is absent, past or unreadable.
func retryAfter(h string, now time.Time) time.Duration {
	if s, err := strconv.ParseUint(h, 10, 31); err == nil { // 31 bits: 68 years, fits a Duration
		return time.Duration(s) * time.Second
	}
	if t, err := http.ParseTime(h); err == nil {
		return max(0, t.Sub(now))
	}
	return 0
}

// withoutURL takes the address out of an HTTP client's error: its path may be
// a secret.
func withoutURL(err error) error {
	if u, ok := errors.AsType[*url.Error](err); ok {
		return u.Err
	}
	return err
}

// private are the networks that may be allowed, being somebody's own: RFC 1918,
// the unique local addresses of RFC 4193, and the shared space of RFC 6598,
// which networks laid over others use.
var private = []netip.Prefix{
	netip.MustParsePrefix("10.0.0.0/8"), netip.MustParsePrefix("172.16.0.0/12"), netip.MustParsePrefix("192.168.0.0/16"),
	netip.MustParsePrefix("100.64.0.0/10"), netip.MustParsePrefix("fc00::/7"),
}

// never are the ranges a webhook cannot be allowed to reach, besides those
// netip knows as loopback, link-local, multicast and unspecified: RFC 6890's
// protocol, benchmark and reserved blocks, and the two that wrap an IPv4
// address (NAT64 of RFC 6052, 6to4).
var never = []netip.Prefix{
	netip.MustParsePrefix("0.0.0.0/8"), netip.MustParsePrefix("192.0.0.0/24"),
	netip.MustParsePrefix("198.18.0.0/15"), netip.MustParsePrefix("240.0.0.0/4"),
	netip.MustParsePrefix("64:ff9b::/96"), netip.MustParsePrefix("64:ff9b:1::/48"), netip.MustParsePrefix("2002::/16"),
}

func contains(networks []netip.Prefix, ip netip.Addr) bool {
	return slices.ContainsFunc(networks, func(p netip.Prefix) bool { return p.Contains(ip) })
}

// within tells whether all of p lies in one of the networks.
func within(networks []netip.Prefix, p netip.Prefix) bool {
	return p.IsValid() && slices.ContainsFunc(networks, func(n netip.Prefix) bool { return n.Bits() <= p.Bits() && n.Contains(p.Addr()) })
}

func list(networks []netip.Prefix) string {
	var names []string
	for _, n := range networks {
		names = append(names, n.String())
	}
	return strings.Join(names, ", ")
}

// checkAddress judges the resolved ip:port just before it is dialled, so that
// no name can resolve to one address when checked and another when used.
func checkAddress(address string, local bool, allowed []netip.Prefix) error {
	ap, err := netip.ParseAddrPort(address)
	if err != nil {
		return fmt.Errorf("address %q: %w", address, err)
	}
	ip := ap.Addr().Unmap().WithZone("")
	if local {
		if ip.IsLoopback() {
			return nil
		}
		return fmt.Errorf("the address says this machine, but it resolves to %s", ip)
	}
	switch {
	case ip.IsLoopback(), ip.IsLinkLocalUnicast(), ip.IsMulticast(), ip.IsUnspecified(), contains(never, ip):
		return fmt.Errorf("the address resolves to %s, which no webhook may reach; correct the url or what its name resolves to", ip)
	case contains(private, ip) && !contains(allowed, ip):
		return fmt.Errorf("the address resolves to %s, which is not public; list its network under allow_private if that is meant", ip)
	}
	return nil
}

// isLocal tells whether host is this machine by its name alone; no look-up.
func isLocal(host string) bool {
	if host == "localhost" {
		return true
	}
	ip, err := netip.ParseAddr(host)
	return err == nil && ip.Unmap().IsLoopback()
}
