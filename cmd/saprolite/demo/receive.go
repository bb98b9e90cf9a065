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

// folder numbers the files that come in.
type folder struct {
	dir, ending string

	mu sync.Mutex
	n  int
}

// keep writes what r gives to the next file.
func (f *folder) keep(r io.Reader) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	file, err := os.Create(filepath.Join(f.dir, fmt.Sprintf("%03d.%s", f.n+1, f.ending)))
	if err != nil {
		return err
	}
	f.n++
	_, err = io.Copy(file, r)
	return errors.Join(err, file.Close())
}

// Kept is how many files have come in.
func (f *folder) Kept() int {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.n
}

// Mailbox is a mail server on this machine that writes each mail it is given
// to a file.
type Mailbox struct {
	folder
	server   *smtp.Server
	listener net.Listener
}

// ReceiveMail starts a mailbox that writes to dir, on a free loopback port.
func ReceiveMail(dir string) (*Mailbox, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return nil, fmt.Errorf("demo mail server: %w", err)
	}
	m := &Mailbox{listener: l, folder: folder{dir: dir, ending: "eml"}}
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
func (s session) Data(r io.Reader) error { return s.keep(r) }

// Hook is a webhook receiver on this machine that writes the body of each post
// to a file.
type Hook struct {
	folder
	server   *http.Server
	listener net.Listener
}

// ReceiveWebhook starts a receiver that writes to dir, on a free loopback port.
func ReceiveWebhook(dir string) (*Hook, error) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		return nil, fmt.Errorf("demo webhook receiver: %w", err)
	}
	h := &Hook{listener: l, folder: folder{dir: dir, ending: "json"}}
	h.server = &http.Server{ReadHeaderTimeout: 5 * time.Second, Handler: http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		if err := h.keep(io.LimitReader(r.Body, 1<<20)); err != nil {
			http.Error(w, err.Error(), http.StatusInternalServerError)
			return
		}
		w.WriteHeader(http.StatusNoContent)
	})}
	go h.server.Serve(l) // ends with Close
	return h, nil
}

// URL is where to post to.
func (h *Hook) URL() string { return "http://" + h.listener.Addr().String() + "/alerts" }

// Close ends the receiver.
func (h *Hook) Close() error { return h.server.Close() }
