package broker

import (
	"context"
	"errors"
	"fmt"
	"net"
	"strings"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// Code says what kind of failure an Error is, so that a caller can decide.
type Code string

const (
	InUse       Code = "in-use"      // another process holds the data folder
	NotRunning  Code = "not-running" // no daemon to attach to
	Full        Code = "full"        // the store has reached its limit, or the disk has no room for it
	Moved       Code = "moved"       // somebody else wrote the subject or book since it was read
	Unreachable Code = "unreachable" // no answer: server down, connection lost, deadline passed
	Refused     Code = "refused"     // credentials or permissions do not allow it
	TooLarge    Code = "too-large"   // message or book above the limit
	NotFound    Code = "not-found"   // the stream does not exist
	Invalid     Code = "invalid"     // an option, key, subject or header is not usable
	Failed      Code = "failed"      // the server could not be started or answered something unexpected
	Closed      Code = "closed"      // this Broker was closed
)

// Error is every error of this package, except that a cancelled context is
// also found by errors.Is(err, context.Canceled). Compare with errors.Is and
// the Err values below, or read Code.
type Error struct {
	Code Code
	Op   string // what was being done
	Err  error  // the cause, may be nil
	Hint string // what a person can do, may be empty
	Pid  int    // InUse: the process that holds the folder, 0 when not known
}

// The Err values stand for their Code in errors.Is; they carry nothing else.
var (
	ErrInUse       = &Error{Code: InUse}
	ErrNotRunning  = &Error{Code: NotRunning}
	ErrFull        = &Error{Code: Full}
	ErrMoved       = &Error{Code: Moved}
	ErrUnreachable = &Error{Code: Unreachable}
	ErrRefused     = &Error{Code: Refused}
	ErrTooLarge    = &Error{Code: TooLarge}
	ErrNotFound    = &Error{Code: NotFound}
	ErrInvalid     = &Error{Code: Invalid}
	ErrClosed      = &Error{Code: Closed}
)

func (e *Error) Error() string {
	var s strings.Builder
	s.WriteString("broker: ")
	if e.Op != "" {
		s.WriteString(e.Op + ": ")
	}
	s.WriteString(string(e.Code))
	if e.Err != nil {
		s.WriteString(": " + e.Err.Error())
	}
	if e.Hint != "" {
		s.WriteString("; " + e.Hint)
	}
	return s.String()
}

func (e *Error) Unwrap() error { return e.Err }

// Is reports whether target is an Error of the same code.
func (e *Error) Is(target error) bool {
	t, ok := target.(*Error)
	return ok && t.Code == e.Code
}

// Temporary reports whether the same call may succeed later without anybody
// changing the data or the configuration.
func (e *Error) Temporary() bool {
	switch e.Code {
	case InUse, Full, Unreachable, NotFound:
		return true
	}
	return false
}

// wrap gives err a code and says what was being done. An Error keeps its code.
func wrap(op string, err error) error {
	if err == nil {
		return nil
	}
	var own *Error
	if errors.As(err, &own) {
		return err
	}
	return &Error{Code: codeOf(err), Op: op, Err: err}
}

// JetStream's error codes that a caller decides by (nats-server v2.15.3,
// server/jetstream_errors_generated.go).
const (
	errInsufficientResources = 10023
	errMemoryExceeded        = 10028
	errStorageExceeded       = 10047
	errMessageTooLarge       = 10054
	errStreamNotFound        = 10059
	errWrongLastSequence     = 10071
	errStoreFailed           = 10077 // limits of the stream: maximum bytes, maximum messages
	errWrongLastSequenceR    = 10164 // the same as 10071 from a replicated stream
	errBatchMissingSeq       = 10175
	errBatchIncomplete       = 10176
	errBatchesInFlight       = 10210
)

func codeOf(err error) Code {
	var js jetstream.JetStreamError
	if errors.As(err, &js) && js.APIError() != nil {
		api := js.APIError()
		switch int(api.ErrorCode) {
		case errWrongLastSequence, errWrongLastSequenceR:
			return Moved
		case errInsufficientResources, errMemoryExceeded, errStorageExceeded, errStoreFailed:
			return Full
		case errMessageTooLarge:
			return TooLarge
		case errStreamNotFound:
			return NotFound
		case errBatchMissingSeq, errBatchIncomplete, errBatchesInFlight:
			return Unreachable
		}
		if api.Code == 503 {
			return Unreachable
		}
		return Failed
	}
	for _, refused := range []error{
		nats.ErrAuthorization, nats.ErrAuthExpired, nats.ErrAuthRevoked, nats.ErrAccountAuthExpired,
		nats.ErrPermissionViolation, nats.ErrNkeysNotSupported, nats.ErrSecureConnRequired,
	} {
		if errors.Is(err, refused) {
			return Refused
		}
	}
	if errors.Is(err, nats.ErrMaxPayload) {
		return TooLarge
	}
	for _, away := range []error{
		nats.ErrTimeout, nats.ErrNoResponders, nats.ErrNoServers, nats.ErrConnectionClosed, nats.ErrConnectionDraining,
		nats.ErrConnectionReconnecting, nats.ErrDisconnected, nats.ErrReconnectBufExceeded, nats.ErrStaleConnection,
		jetstream.ErrNoStreamResponse, jetstream.ErrNoHeartbeat, jetstream.ErrConsumerDeleted,
		jetstream.ErrConnectionClosed, jetstream.ErrMsgIteratorClosed,
		context.DeadlineExceeded, context.Canceled,
	} {
		if errors.Is(err, away) {
			return Unreachable
		}
	}
	if _, ok := errors.AsType[net.Error](err); ok {
		return Unreachable
	}
	return Failed
}

func invalid(op, format string, args ...any) error {
	return &Error{Code: Invalid, Op: op, Err: fmt.Errorf(format, args...)}
}
