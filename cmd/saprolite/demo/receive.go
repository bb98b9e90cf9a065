package demo

import (
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"sync"
	"time"

	"github.com/emersion/go-smtp"
)

// Mailbox is a mail server on this machine that writes each mail it is given
// to a file.
type Mailbox struct {
	server   *smtp.Server
	listener net.Listener
	dir      string

	mu sync.Mutex
	n  int
}

// ReceiveMail starts a mailbox that writes to dir, on a free loopback port.
func ReceiveMail(dir string) (*Mailbox, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return nil, fmt.Errorf("demo mail server: %w", err)
	}
	m := &Mailbox{listener: l, dir: dir}
	m.server = smtp.NewServer(m)
	m.server.Domain = "localhost"
	m.server.MaxMessageBytes = 1 << 20
	m.server.ReadTimeout, m.server.WriteTimeout = 10*time.Second, 10*time.Second
	go m.server.Serve(l) // ends with Close
	return m, nil
}

// Address is host:port of the mailbox.
func (m *Mailbox) Address() string { return m.listener.Addr().String() }

// Close ends the mailbox.
func (m *Mailbox) Close() error { return m.server.Close() }

// NewSession is one SMTP conversation.
func (m *Mailbox) NewSession(*smtp.Conn) (smtp.Session, error) { return session{m}, nil }

type session struct{ *Mailbox }

func (session) Mail(string, *smtp.MailOptions) error { return nil }
func (session) Rcpt(string, *smtp.RcptOptions) error { return nil }
func (session) Reset()                               {}
func (session) Logout() error                        { return nil }

// Data writes a mail to the next file.
func (s session) Data(r io.Reader) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.n++
	file, err := os.Create(filepath.Join(s.dir, fmt.Sprintf("%03d.eml", s.n)))
	if err != nil {
		return err
	}
	_, err = io.Copy(file, r)
	return errors.Join(err, file.Close())
}

// Hook is a webhook receiver on this machine.
type Hook struct {
	server   *http.Server
	listener net.Listener
}

// ReceiveWebhook starts a receiver on a free loopback port that calls posted
// with each body.
func ReceiveWebhook(posted func(body string)) (*Hook, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return nil, fmt.Errorf("demo webhook receiver: %w", err)
	}
	h := &Hook{listener: l}
	h.server = &http.Server{ReadHeaderTimeout: 5 * time.Second, Handler: http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		body, err := io.ReadAll(io.LimitReader(r.Body, 1<<20))
		if err != nil {
			http.Error(w, err.Error(), http.StatusBadRequest)
			return
		}
		posted(string(body))
		w.WriteHeader(http.StatusNoContent)
	})}
	go h.server.Serve(l) // ends with Close
	return h, nil
}

// URL is where to post to.
func (h *Hook) URL() string { return "http://" + h.listener.Addr().String() + "/alerts" }

// Close ends the receiver.
func (h *Hook) Close() error { return h.server.Close() }
