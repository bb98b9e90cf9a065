// Package mail brings alert messages to mailboxes through one SMTP relay.
//
// Use New for a destination that sends, and Compose alone where a mail is to
// be looked at or written to a file. Do not use it for anything but alert
// messages: its headers say "automatic", and answers to it go nowhere.
package mail

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"net"
	"net/netip"
	"net/textproto"
	"regexp"
	"strconv"
	"strings"
	"time"

	gomail "github.com/wneessen/go-mail"
	"github.com/wneessen/go-mail/smtp"

	"saprolite/alerts"
)

// TLS says how the way to the relay is kept private.
type TLS string

const (
	StartTLS TLS = "starttls" // required: without it nothing is sent. The default.
	NoTLS    TLS = "none"     // only to a relay on this machine
)

// Options are the settings of one mail destination.
type Options struct {
	Name     string         // the destination's, [a-z0-9][a-z0-9_-]{0,63}
	Server   string         // the relay, host:port
	From     string         // plain address, also the envelope sender: bounces go there
	To       []string       // plain addresses. Who needs retries of their own gets a destination of their own
	Username string         // empty: no login
	Password string         // with Username
	TLS      TLS            // empty: StartTLS
	RootCAs  *x509.CertPool // who may sign the relay's certificate; nil: the system's
	Place    string         // name of the forest, shown in subject and text
	Hello    string         // our name in EHLO; empty: the domain of From
}

// Destination sends alert messages as mail.
type Destination struct {
	opts Options
	host string
	port int
}

// New checks the options, all of them at once, and returns a destination. It
// does not connect.
func New(o Options) (*Destination, error) {
	d := &Destination{opts: o}
	var errs []error
	bad := func(format string, args ...any) {
		errs = append(errs, fmt.Errorf("mail destination %s: %w", o.Name, fmt.Errorf(format, args...)))
	}
	host, port, err := net.SplitHostPort(o.Server)
	if err == nil {
		d.host = host
		d.port, err = strconv.Atoi(port)
	}
	if err != nil || host == "" || d.port < 1 || d.port > 65535 {
		bad("server %q: expected host:port, such as relay.example.org:587", o.Server)
	}
	for _, a := range append([]string{o.From}, o.To...) {
		if err := checkAddress(a); err != nil {
			bad("%w", err)
		}
	}
	if len(o.To) == 0 {
		bad("to: expected at least one address")
	}
	switch o.TLS {
	case "", StartTLS:
	case NoTLS:
		if !loopback(host) {
			bad("tls none is allowed only to a relay on this machine (127.0.0.1, ::1 or localhost), not to %q; use starttls", host)
		}
	default:
		bad("tls %q: expected starttls or none", o.TLS)
	}
	if o.Password != "" && o.Username == "" {
		bad("a password needs a username")
	}
	if strings.ContainsAny(o.Hello, " \r\n\t") {
		bad("hello %q: expected a host name", o.Hello)
	}
	if d.opts.Hello == "" {
		d.opts.Hello = domainOf(o.From)
	}
	if len(errs) > 0 {
		return nil, errors.Join(errs...)
	}
	return d, nil
}

// Name is the destination's name.
func (d *Destination) Name() string { return d.opts.Name }

// Deliver sends m and returns nil once the relay has taken it for every
// recipient. Its errors are *alerts.Undeliverable:
//
//   - permanent: the relay answered 5xx to the message (not to our login);
//     or it took the message for some recipients and refused others, who
//     are named;
//   - unknown: all was sent and no answer came;
//   - temporary: everything else.
func (d *Destination) Deliver(ctx context.Context, m alerts.Message) error {
	msg, err := Compose(m, d.opts)
	if err != nil {
		return &alerts.Undeliverable{Permanent: true, Err: err}
	}
	client, hangUp, err := d.dial(ctx)
	defer hangUp()
	if err != nil {
		// Greeting, STARTTLS and login say nothing about the message: whatever
		// is wrong there can be put right by the operator.
		return &alerts.Undeliverable{Err: fmt.Errorf("connecting to %s: %w", d.opts.Server, err)}
	}
	if err := client.Mail(d.opts.From); err != nil {
		return refusal("sender "+d.opts.From, err)
	}
	refused, err := d.offer(client)
	if err != nil {
		return err
	}
	w, err := client.Data()
	if err != nil {
		return refusal("starting to send", err)
	}
	if _, err := msg.WriteTo(w); err != nil { // without the closing dot the relay takes nothing
		return &alerts.Undeliverable{Err: fmt.Errorf("sending to %s: %w", d.opts.Server, err)}
	}
	if err := w.Close(); err != nil {
		if _, answered := errors.AsType[*textproto.Error](err); !answered {
			return &alerts.Undeliverable{Unknown: true, Err: fmt.Errorf("%s did not answer after the message was sent: %w", d.opts.Server, err)}
		}
		return refusal("message", err)
	}
	// The relay has it; how it takes leave does not matter.
	_ = client.Quit()
	if len(refused) > 0 {
		return &alerts.Undeliverable{Permanent: true,
			Err: fmt.Errorf("sent to %d of %d; not to %w", len(d.opts.To)-len(refused), len(d.opts.To), errors.Join(refused...))}
	}
	return nil
}

// offer names the recipients to the relay. As long as one is taken the others'
// refusals are returned to be told after sending; a mailbox that is full must
// not keep a warning from everyone else.
func (d *Destination) offer(client *smtp.Client) (refused []error, err error) {
	var hopeful *alerts.Undeliverable // the first refusal that may pass
	for _, to := range d.opts.To {
		err := client.Rcpt(to)
		if err == nil {
			continue
		}
		u := refusal(to, err)
		if _, answered := errors.AsType[*textproto.Error](err); !answered {
			return nil, u // the connection is gone
		}
		if !u.Permanent && hopeful == nil {
			hopeful = u
		}
		refused = append(refused, u.Err)
	}
	switch {
	case len(refused) < len(d.opts.To):
		return refused, nil
	case hopeful != nil:
		return nil, hopeful
	}
	return nil, &alerts.Undeliverable{Permanent: true, Err: errors.Join(refused...)}
}

// dial connects, says hello, starts TLS and logs in. hangUp must always be
// called; the end of ctx hangs up too, whatever the relay is doing.
func (d *Destination) dial(ctx context.Context) (client *smtp.Client, hangUp func(), err error) {
	hangUp = func() {}
	opts := []gomail.Option{
		gomail.WithPort(d.port), gomail.WithHELO(d.opts.Hello), gomail.WithoutSMTPUTF8(),
		gomail.WithTLSPolicy(gomail.TLSMandatory),
		gomail.WithTLSConfig(&tls.Config{ServerName: d.host, MinVersion: tls.VersionTLS12, RootCAs: d.opts.RootCAs}),
		gomail.WithDialContextFunc(func(ctx2 context.Context, network, address string) (net.Conn, error) {
			conn, err := new(net.Dialer).DialContext(ctx2, network, address)
			if err != nil {
				return nil, err
			}
			release := context.AfterFunc(ctx, func() { _ = conn.Close() })
			hangUp = func() { release(); _ = conn.Close() }
			return conn, nil
		}),
	}
	if end, ok := ctx.Deadline(); ok { // a little more, so that ctx is what ends it
		opts = append(opts, gomail.WithTimeout(max(time.Until(end), 0)+time.Second))
	}
	if d.opts.TLS == NoTLS {
		opts = append(opts, gomail.WithTLSPolicy(gomail.NoTLS))
	}
	if d.opts.Username != "" {
		opts = append(opts, gomail.WithSMTPAuth(gomail.SMTPAuthAutoDiscover),
			gomail.WithUsername(d.opts.Username), gomail.WithPassword(d.opts.Password))
	}
	// A client of its own for every mail: go-mail's may not be shared (its
	// issue 385).
	c, err := gomail.NewClient(d.host, opts...)
	if err != nil {
		return nil, hangUp, err
	}
	client, err = c.DialToSMTPClientWithContext(ctx)
	if err != nil && ctx.Err() != nil {
		err = fmt.Errorf("%w (%w)", ctx.Err(), err)
	}
	return client, hangUp, err
}

// refusal sorts an answer: 5xx is permanent, unless it is about our login
// (530, 534, 535, 538 of RFC 4954), which the operator can cure.
func refusal(what string, err error) *alerts.Undeliverable {
	u := &alerts.Undeliverable{Err: fmt.Errorf("%s: %w", what, err)}
	if answer, ok := errors.AsType[*textproto.Error](err); ok {
		switch answer.Code {
		case 530, 534, 535, 538:
		default:
			u.Permanent = answer.Code/100 == 5
		}
	}
	return u
}

// plainAddress is an addr-spec without quotes, comments or literals: dot-atom
// of RFC 5322 section 3.2.3 at a host name. It leaves no room for a second
// recipient or a header.
var plainAddress = regexp.MustCompile("^[A-Za-z0-9!#$%&'*+/=?^_`{|}~-]+(\\.[A-Za-z0-9!#$%&'*+/=?^_`{|}~-]+)*@[A-Za-z0-9-]+(\\.[A-Za-z0-9-]+)*$")

func checkAddress(a string) error {
	if len(a) > 254 || !plainAddress.MatchString(a) { // 254: RFC 5321 erratum 1690
		return fmt.Errorf("address %q: expected a plain one, such as forester@example.org, without name or brackets", a)
	}
	return nil
}

func domainOf(address string) string { return address[strings.LastIndexByte(address, '@')+1:] }

// loopback tells whether host is this machine by its name alone; no look-up.
func loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip, err := netip.ParseAddr(host)
	return err == nil && ip.Unmap().IsLoopback()
}
