// Package observation is the common coin of the house: one observation as it
// came in, one day value as it is kept. It is a leaf; it knows quantities and
// nothing else.
//
// Use Observation between the wire and the daybook, DayValue from the daybook
// on. Formats live in ingest/wire.
package observation

import (
	"math"
	"time"

	"saprolite/ingest/quantity"
)

// Flag is a QARTOD primary flag (UNESCO-IOC 54, 2013).
type Flag uint8

const (
	Pass         Flag = 1
	NotEvaluated Flag = 2
	Suspect      Flag = 3
	Fail         Flag = 4
	Missing      Flag = 9
)

// Valid tells whether f is one of QARTOD's five.
func (f Flag) Valid() bool { return f >= Pass && f <= Fail || f == Missing }

// Usable tells whether a value with this flag may enter an account.
func (f Flag) Usable() bool { return f == Pass || f == NotEvaluated }

func (f Flag) String() string {
	switch f {
	case Pass:
		return "pass"
	case NotEvaluated:
		return "not evaluated"
	case Suspect:
		return "suspect"
	case Fail:
		return "fail"
	case Missing:
		return "missing"
	}
	return "invalid flag"
}

// Observation is one value of one quantity from one source.
type Observation struct {
	Source   string
	Quantity quantity.Quantity
	// Start and End bound the time the value speaks for, End exclusive. An
	// instant has End == Start.
	Start, End time.Time
	// WholeDays says that Start and End came as dates: they are the source's
	// own days, held here at UTC midnight, and shift with the source's offset.
	WholeDays bool
	Value     float64 // in the canonical unit; NaN when Flag is Missing
	SD        float64 // one standard deviation, canonical unit; NaN when unknown
	Flag      Flag
	// Available is when the value became known. Zero means: at its end (a
	// history), or when the broker stored it (live).
	Available time.Time
}

// In returns o with its dates, if it came with dates, made instants at the
// source's fixed offset from UTC.
func (o Observation) In(offset time.Duration) Observation {
	if o.WholeDays {
		o.Start, o.End, o.WholeDays = o.Start.Add(-offset), o.End.Add(-offset), false
	}
	return o
}

// DayValue is one source's value of one quantity for one of the source's days.
type DayValue struct {
	Value     float64 // canonical unit; NaN when missing
	SD        float64 // one standard deviation; NaN when unknown
	Flag      Flag
	Available time.Time // when the last reading that made it became known
}

// Known tells whether the value may enter an account.
func (v DayValue) Known() bool { return v.Flag.Usable() && !math.IsNaN(v.Value) }
