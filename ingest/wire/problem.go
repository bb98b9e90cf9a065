// Package wire turns formats into observations and back: CSV by design 5.3,
// and SenML JSON (RFC 8428) by design 5.4.
//
// It resolves names, units and times, and refuses what it cannot read with a
// Problem that a person can act on; nothing is guessed and nothing is dropped
// silently. Use it where bytes come in or go out. Do not use it to judge
// whether a value is plausible (ingest/quality), nor to learn whose day an
// observation belongs to (ingest/daybook).
package wire

import (
	"fmt"
	"strconv"
	"strings"
)

// The largest inputs accepted in one post (design 5.4). A CSV file that is
// read with a CSVReader may be of any size; only its lines are limited.
const (
	MaxSenML   = 64 << 10  // bytes of a SenML pack
	MaxCSVPost = 512 << 10 // bytes of a CSV post
)

// Code says what kind of problem it is, for a caller that must decide and for
// counting. Codes are public: they appear with what is held.
type Code string

const (
	Unreadable      Code = "unreadable"       // not the format at all: syntax, encoding, structure
	TooLarge        Code = "too-large"        // beyond a limit of size or nesting
	DuplicateKey    Code = "duplicate-key"    // a label or column given twice, or once more in other letter case
	BadVersion      Code = "bad-version"      // a SenML version, or a label that must be understood, that is not known here
	BadColumn       Code = "bad-column"       // a column missing or unknown
	BadName         Code = "bad-name"         // no name, or not one SenML allows
	BadSource       Code = "bad-source"       // not an id
	UnknownQuantity Code = "unknown-quantity" // not in the list of design 5.5
	UnknownUnit     Code = "unknown-unit"     // missing, unknown, or of something else
	NoInterval      Code = "no-interval"      // a rate or an energy without the time it is over
	BadTime         Code = "bad-time"         // not a time, out of order, or beyond belief
	BadValue        Code = "bad-value"        // no value, or none that is a number
	NotNumber       Code = "not-a-number"     // a SenML string, boolean or data value
	BadFlag         Code = "bad-flag"         // not one of QARTOD's
)

// Problem says what could not be read, where, what was expected and what to
// do. It is an error.
type Problem struct {
	File   string // as given to the reader; "" for a pack
	Line   int    // in a CSV file, from 1; 0 when there is none
	Record int    // in a SenML pack, from 1 (RFC 8428 section 9); 0 is the whole pack
	Byte   int    // in a SenML pack, from 0; meant only where Record is 0
	Field  string // column or label; "" for the whole row or record
	Code   Code
	Reason string
}

func (p *Problem) Error() string {
	var where []string
	if p.File != "" {
		where = append(where, p.File)
	}
	if p.Line > 0 {
		where = append(where, "line "+strconv.Itoa(p.Line))
	}
	if p.Record > 0 {
		where = append(where, "record "+strconv.Itoa(p.Record))
	}
	if p.Byte > 0 && p.Record == 0 && p.Line == 0 {
		where = append(where, "byte "+strconv.Itoa(p.Byte))
	}
	if p.Field != "" {
		where = append(where, p.Field)
	}
	return strings.Join(append(where, p.Reason), ": ")
}

// problem makes a Problem without a place; the reader that knows adds it.
func problem(code Code, field, format string, args ...any) *Problem {
	return &Problem{Field: field, Code: code, Reason: fmt.Sprintf(format, args...)}
}

// brief quotes s, cut short when it is long: reasons are for people and are
// stored.
func brief[T string | []byte](s T) string {
	const longest = 60
	if len(s) > longest {
		return strconv.Quote(string(s[:longest])) + "..."
	}
	return strconv.Quote(string(s))
}
