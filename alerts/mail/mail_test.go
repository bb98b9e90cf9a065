package mail

import (
	"bufio"
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"errors"
	"fmt"
	"io"
	"math/big"
	"net"
	"os"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/emersion/go-sasl"
	"github.com/emersion/go-smtp"

	"saprolite/alerts"
)

// relay is a real SMTP server on loopback that answers what its fields say.
type relay struct {
	rcpt   map[string]error // by address
	data   error
	login  error
	secure *tls.Config

	mu    sync.Mutex
	mails []received
	addr  string
}

type received struct {
	from string
	to   []string
	raw  []byte
	tls  bool
}

func (r *relay) start(t *testing.T) *relay {
	t.Helper()
	s := smtp.NewServer(smtp.BackendFunc(func(c *smtp.Conn) (smtp.Session, error) {
		_, tls := c.TLSConnectionState()
		return &session{relay: r, mail: received{tls: tls}}, nil
	}))
	s.Domain, s.TLSConfig, s.ErrorLog = "relay.hollin.example", r.secure, quiet{}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	r.addr = l.Addr().String()
	go func() { _ = s.Serve(l) }()
	t.Cleanup(func() { _ = s.Close() })
	return r
}

func (r *relay) received() []received {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.mails
}

type quiet struct{}

func (quiet) Printf(string, ...any) {}
func (quiet) Println(...any)        {}

type session struct {
	relay *relay
	mail  received
}

func (s *session) Mail(from string, _ *smtp.MailOptions) error { s.mail.from = from; return nil }

func (s *session) Rcpt(to string, _ *smtp.RcptOptions) error {
	if err := s.relay.rcpt[to]; err != nil {
		return err
	}
	s.mail.to = append(s.mail.to, to)
	return nil
}

func (s *session) Data(r io.Reader) (err error) {
	if s.mail.raw, err = io.ReadAll(r); err != nil {
		return err
	}
	if s.relay.data != nil {
		return s.relay.data
	}
	s.relay.mu.Lock()
	defer s.relay.mu.Unlock()
	s.relay.mails = append(s.relay.mails, s.mail)
	return nil
}

func (s *session) Reset()        {}
func (s *session) Logout() error { return nil }

func (s *session) AuthMechanisms() []string { return []string{sasl.Plain} }
func (s *session) Auth(string) (sasl.Server, error) {
	return sasl.NewPlainServer(func(_, user, password string) error {
		if s.relay.login != nil {
			return s.relay.login
		}
		if user != "hollin" || password != "open sesame" {
			return smtp.ErrAuthFailed
		}
		return nil
	}), nil
}

func answer(code int, text string) error {
	return &smtp.SMTPError{Code: code, EnhancedCode: smtp.EnhancedCodeNotSet, Message: text}
}

func deliver(t *testing.T, o Options, m alerts.Message) error {
	t.Helper()
	d, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
	defer cancel()
	return d.Deliver(ctx, m)
}

func at(addr string) Options {
	o := options()
	o.Server = addr
	return o
}

func TestDeliver(t *testing.T) {
	r := (&relay{}).start(t)
	m := upperBeck(t)
	for range 2 { // a second time after a crash: the same mail
		if err := deliver(t, at(r.addr), m); err != nil {
			t.Fatal(err)
		}
	}
	got := r.received()
	if len(got) != 2 || got[0].from != "saprolite@hollin.example" || strings.Join(got[0].to, " ") != "forester@hollin.example warden@hollin.example" {
		t.Fatalf("received %d mails, the first from %s to %v", len(got), got[0].from, got[0].to)
	}
	if want := write(t, m, options()); string(got[0].raw) != string(want) || string(got[1].raw) != string(want) {
		t.Errorf("received:\n%s\nwant:\n%s", got[0].raw, want)
	}
}

// reliability.md section 2, case 12: 451 and 421 are retried, 550 is not.
func TestRefusals(t *testing.T) {
	for name, c := range map[string]struct {
		relay     *relay
		permanent bool
		sent      int
		says      string
	}{
		"451 after the message":   {&relay{data: answer(451, "greylisted")}, false, 0, "451"},
		"421 after the message":   {&relay{data: answer(421, "closing")}, false, 0, "421"},
		"550 after the message":   {&relay{data: answer(550, "no")}, true, 0, "550"},
		"552 too large":           {&relay{data: answer(552, "too large")}, true, 0, "552"},
		"all recipients 550":      {&relay{rcpt: map[string]error{"forester@hollin.example": answer(550, "gone"), "warden@hollin.example": answer(550, "gone")}}, true, 0, "forester@hollin.example"},
		"550 and 451":             {&relay{rcpt: map[string]error{"forester@hollin.example": answer(550, "gone"), "warden@hollin.example": answer(451, "later")}}, false, 0, "warden@hollin.example"},
		"530 log in first":        {&relay{rcpt: map[string]error{"forester@hollin.example": answer(530, "log in"), "warden@hollin.example": answer(530, "log in")}}, false, 0, "530"},
		"one recipient of two":    {&relay{rcpt: map[string]error{"warden@hollin.example": answer(550, "gone")}}, true, 1, "sent to 1 of 2; not to warden@hollin.example"},
		"one full mailbox of two": {&relay{rcpt: map[string]error{"warden@hollin.example": answer(452, "full")}}, true, 1, "sent to 1 of 2; not to warden@hollin.example"},
	} {
		t.Run(name, func(t *testing.T) {
			c.relay.start(t)
			err := deliver(t, at(c.relay.addr), upperBeck(t))
			u, ok := errors.AsType[*alerts.Undeliverable](err)
			if !ok {
				t.Fatalf("got %v", err)
			}
			if u.Permanent != c.permanent || u.Unknown || !strings.Contains(err.Error(), c.says) {
				t.Errorf("got %v (permanent %v, unknown %v); want permanent %v and %q", err, u.Permanent, u.Unknown, c.permanent, c.says)
			}
			if n := len(c.relay.received()); n != c.sent {
				t.Errorf("%d mails sent, want %d", n, c.sent)
			}
		})
	}
}

// raw is a relay of another kind: it talks by script, then does what end says.
func raw(t *testing.T, end func(net.Conn), script ...string) string {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = l.Close() })
	go func() {
		for {
			c, err := l.Accept()
			if err != nil {
				return
			}
			go func() {
				defer c.Close()
				in := bufio.NewReader(c)
				for i, line := range script {
					if i > 0 {
						if _, err := in.ReadString('\n'); err != nil {
							return
						}
					}
					fmt.Fprintf(c, "%s\r\n", line)
				}
				for { // the mail, up to its closing dot
					s, err := in.ReadString('\n')
					if err != nil || s == ".\r\n" {
						break
					}
				}
				end(c)
			}()
		}
	}()
	return l.Addr().String()
}

func isTemporary(t *testing.T, err error) {
	t.Helper()
	if u, ok := errors.AsType[*alerts.Undeliverable](err); !ok || u.Permanent || u.Unknown {
		t.Errorf("got %#v, want a temporary failure", err)
	}
}

// reliability.md section 2, case 11: silence after the message is unknown.
func TestSilenceAfterTheMessageIsUnknown(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	defer cancel()
	hungUp := make(chan bool, 1)
	for name, end := range map[string]func(net.Conn){
		"hangs up": func(c net.Conn) { _ = c.Close() },
		"stalls": func(c net.Conn) {
			cancel()
			// 10 s is below go-mail's own limit of 15 s; it passes only when ctx does not hang up.
			_ = c.SetReadDeadline(time.Now().Add(10 * time.Second))
			_, err := io.Copy(io.Discard, c)
			hungUp <- !errors.Is(err, os.ErrDeadlineExceeded)
		},
	} {
		t.Run(name, func(t *testing.T) {
			ctx := ctx
			if name == "hangs up" {
				ctx = context.Background()
			}
			addr := raw(t, end, "220 relay", "250 relay", "250 ok", "250 ok", "250 ok", "354 go on")
			d, err := New(at(addr))
			if err != nil {
				t.Fatal(err)
			}
			err = d.Deliver(ctx, upperBeck(t))
			if u, ok := errors.AsType[*alerts.Undeliverable](err); !ok || !u.Unknown || u.Permanent {
				t.Errorf("got %v, want an unknown outcome", err)
			}
		})
	}
	if !<-hungUp {
		t.Error("the end of the context did not hang up on a relay that stalls")
	}
}

func TestAnUnreachableOrSilentRelayIsTemporary(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	closed := l.Addr().String()
	_ = l.Close()
	isTemporary(t, deliver(t, at(closed), upperBeck(t)))

	mute := raw(t, func(net.Conn) {}) // accepts, says nothing
	d, err := New(at(mute))
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), time.Second)
	defer cancel()
	err = d.Deliver(ctx, upperBeck(t))
	isTemporary(t, err)
	if !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("got %v, want it to wrap the end of the deadline", err)
	}
	isTemporary(t, deliver(t, at(raw(t, func(net.Conn) {}, "554 no mail from you")), upperBeck(t)))
}

func TestWithoutSTARTTLSNothingIsSent(t *testing.T) {
	r := (&relay{}).start(t) // has no certificate, so offers none
	o := at(r.addr)
	o.TLS = StartTLS
	err := deliver(t, o, upperBeck(t))
	isTemporary(t, err)
	if !strings.Contains(err.Error(), "STARTTLS") {
		t.Errorf("error %q does not name STARTTLS", err)
	}
	if n := len(r.received()); n != 0 {
		t.Errorf("%d mails sent in the clear", n)
	}
}

func TestSTARTTLSAndLogin(t *testing.T) {
	good, roots := certificate(t, "127.0.0.1")
	r := (&relay{secure: good}).start(t)
	o := at(r.addr)
	o.TLS, o.RootCAs, o.Username, o.Password = StartTLS, roots, "hollin", "open sesame"
	if err := deliver(t, o, upperBeck(t)); err != nil {
		t.Fatal(err)
	}
	if got := r.received(); len(got) != 1 || !got[0].tls {
		t.Errorf("received %d mails, want one under TLS", len(got))
	}

	wrong := o
	wrong.Password = "xyzzy plugh"
	err := deliver(t, wrong, upperBeck(t))
	isTemporary(t, err) // the operator can cure it
	if strings.Contains(err.Error(), "xyzzy") {
		t.Errorf("the error shows the password: %v", err)
	}

	// reliability.md section 2, case 16: body bytes sent = 0.
	stranger := o
	stranger.RootCAs = x509.NewCertPool()
	isTemporary(t, deliver(t, stranger, upperBeck(t)))
	other, otherRoots := certificate(t, "192.0.2.1")
	r2 := (&relay{secure: other}).start(t)
	misnamed := at(r2.addr)
	misnamed.TLS, misnamed.RootCAs = "", otherRoots
	isTemporary(t, deliver(t, misnamed, upperBeck(t)))
	if n := len(r.received()) + len(r2.received()); n != 1 {
		t.Errorf("%d mails arrived, want the first alone", n)
	}
}

// certificate is one for ip, signed by itself, with the pool that trusts it.
func certificate(t *testing.T, ip string) (*tls.Config, *x509.CertPool) {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	c := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "relay"},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IPAddresses: []net.IP{net.ParseIP(ip)}, IsCA: true, BasicConstraintsValid: true,
	}
	der, err := x509.CreateCertificate(rand.Reader, c, c, key.Public(), key)
	if err != nil {
		t.Fatal(err)
	}
	leaf, err := x509.ParseCertificate(der)
	if err != nil {
		t.Fatal(err)
	}
	pool := x509.NewCertPool()
	pool.AddCert(leaf)
	return &tls.Config{Certificates: []tls.Certificate{{Certificate: [][]byte{der}, PrivateKey: key}}}, pool
}

func TestNewNamesEveryMistake(t *testing.T) {
	_, err := New(Options{Name: "office", Server: "relay.hollin.example", From: "Hollin <a@b>", TLS: "maybe", Password: "x", Hello: "a b"})
	for _, want := range []string{"server", "address", "to:", "tls", "username", "hello"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v\ndoes not name %q", err, want)
		}
	}
	for server, ok := range map[string]bool{
		"127.0.0.1:25": true, "[::1]:25": true, "localhost:25": true, "127.8.8.8:25": true,
		"192.0.2.1:25": false, "localhost.example.org:25": false, "0.0.0.0:25": false,
	} {
		o := options()
		o.Server = server
		if _, err := New(o); (err == nil) != ok {
			t.Errorf("tls none to %s: %v", server, err)
		}
	}
}
