package broker

import (
	"context"
	"errors"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// IDHeader carries a message's own id. A stream stores an id once within its
// window: 2 minutes in OBSERVATIONS and ALERTS, an hour in HELD.
const IDHeader = jetstream.MsgIDHeader

// Header of a message; names are compared exactly.
type Header map[string][]string

// Get returns the first value, or "".
func (h Header) Get(name string) string {
	if v := h[name]; len(v) > 0 {
		return v[0]
	}
	return ""
}

// Msg is one stored message. Data and Header belong to the receiver.
type Msg struct {
	Subject string
	Header  Header
	Data    []byte
	Seq     uint64    // in its stream, from 1
	Stored  time.Time // by the server's clock
	Pending uint64    // how many more matched when it was sent; Follow only
}

func message(op, subject string, header map[string]string, data []byte) (*nats.Msg, error) {
	m := &nats.Msg{Subject: subject, Data: data, Header: make(nats.Header, len(header)+3)} // room for the batch's own
	if subject == "" || strings.ContainsAny(subject, " \t\r\n*>") || strings.HasPrefix(subject, ".") ||
		strings.HasSuffix(subject, ".") || strings.Contains(subject, "..") {
		return nil, invalid(op, "subject %q: expected words joined by dots, without blanks, * and >", subject)
	}
	for name, value := range header {
		if strings.HasPrefix(name, "Nats-") && name != IDHeader {
			return nil, invalid(op, "header %q: names that begin with Nats- command the server", name)
		}
		if name == "" || strings.ContainsAny(name, ": \t\r\n") || strings.ContainsAny(value, "\r\n") {
			return nil, invalid(op, "header %q: expected a name without blank or colon and a value of one line", name)
		}
		m.Header[name] = []string{value}
	}
	return m, nil
}

// Publish stores one message and returns its sequence in the stream that
// takes its subject. When it returns nil the message is as durable as Options
// say. Codes: Full, TooLarge (above 1 MiB with headers), Unreachable (it may
// have been stored all the same), Invalid.
func (b *Broker) Publish(ctx context.Context, subject string, header map[string]string, data []byte) (seq uint64, err error) {
	op := "publishing to " + subject
	m, err := message(op, subject, header, data)
	if err != nil {
		return 0, err
	}
	ack, err := b.js.PublishMsg(ctx, m)
	if err != nil {
		return 0, b.wrap(op, err)
	}
	return ack.Sequence, nil
}

// PublishExpect stores a message only if the newest message of its subject
// has sequence expected (0: there is none), else code Moved: read again and
// decide again. If that newest message is this very one, by its id, because
// an earlier call's answer was lost, its sequence is returned and no error.
func (b *Broker) PublishExpect(ctx context.Context, subject string, data []byte, msgID string, expected uint64) (seq uint64, err error) {
	op := "publishing to " + subject
	m, err := message(op, subject, nil, data)
	if err != nil {
		return 0, err
	}
	options := []jetstream.PublishOpt{jetstream.WithExpectLastSequencePerSubject(expected)}
	if msgID != "" {
		options = append(options, jetstream.WithMsgID(msgID))
	}
	ack, err := b.js.PublishMsg(ctx, m, options...)
	if err == nil {
		return ack.Sequence, nil
	}
	err = b.wrap(op, err)
	// The server looks at the sequence before the id.
	if errors.Is(err, ErrMoved) && msgID != "" {
		if stream, e := b.js.StreamNameBySubject(ctx, subject); e == nil {
			last, ok, e := b.Last(ctx, stream, subject)
			if e == nil && ok && last.Header.Get(IDHeader) == msgID {
				return last.Seq, nil
			}
		}
	}
	return 0, err
}

// Last returns the newest message of a subject (which may hold wildcards), and
// whether there is one.
func (b *Broker) Last(ctx context.Context, stream, subject string) (Msg, bool, error) {
	op := "reading the last message of " + subject
	s, err := b.stream(ctx, stream)
	if err != nil {
		return Msg{}, false, b.wrap(op, err)
	}
	raw, err := s.GetLastMsgForSubject(ctx, subject)
	if errors.Is(err, jetstream.ErrMsgNotFound) {
		return Msg{}, false, nil
	}
	if err != nil {
		return Msg{}, false, b.wrap(op, err)
	}
	return Msg{Subject: raw.Subject, Header: Header(raw.Header), Data: raw.Data, Seq: raw.Sequence, Stored: raw.Time}, true, nil
}
