package main

import (
	"errors"
	"fmt"
	"io"

	"saprolite/ingest/broker"
	"saprolite/ingest/daybook"
)

// Exit codes (design 5.9, after sysexits.h).
const (
	exitUsage         = 64
	exitData          = 65
	exitBug           = 70
	exitTemporary     = 75
	exitConfiguration = 78
)

// exitError carries the exit code a command ends with.
type exitError struct {
	code int
	err  error
}

func (e *exitError) Error() string { return e.err.Error() }
func (e *exitError) Unwrap() error { return e.err }

func exitWith(code int, err error) error {
	if err == nil {
		return nil
	}
	return &exitError{code, err}
}

// exitCode says an error once, at the edge, and returns its exit code.
func exitCode(err error, errs io.Writer) int {
	if err == nil {
		return 0
	}
	fmt.Fprintf(errs, "saprolite: %v\n", err)
	if exit, ok := errors.AsType[*exitError](err); ok {
		return exit.code
	}
	if errors.Is(err, daybook.ErrOffset) {
		return exitConfiguration
	}
	if b, ok := errors.AsType[*broker.Error](err); ok {
		return brokerExit(b)
	}
	return exitBug
}

// opening is an error of opening the store: what fails there, such as a port
// that is taken, fails again until somebody changes something.
func opening(err error) error {
	if b, ok := errors.AsType[*broker.Error](err); ok && b.Code == broker.Failed {
		return exitWith(exitConfiguration, err)
	}
	return err
}

// brokerExit says whether starting again can help.
func brokerExit(e *broker.Error) int {
	switch e.Code {
	case broker.InUse, broker.Full, broker.Unreachable, broker.NotFound, broker.Moved, broker.Closed, broker.NotRunning, broker.Failed:
		return exitTemporary
	case broker.Refused, broker.Invalid:
		return exitConfiguration
	case broker.TooLarge:
		return exitData
	}
	return exitBug
}
