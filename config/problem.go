package config

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
)

// Problem is one mistake in a file.
type Problem struct {
	File string
	// Line and Column count from 1 and name where the offending value (or the
	// unknown property) begins; 0 means the file as a whole. Column counts
	// bytes in GeoJSON, characters in YAML.
	Line, Column int
	Field        string // which property of what: "stand north-slope: p50_mpa"
	Message      string // what is wrong, with what was expected
	Cure         string // what to do
}

// String writes the problem on one line: file:line:column: field: message;
// cure.
func (p Problem) String() string {
	var b strings.Builder
	b.WriteString(p.File)
	if p.Line > 0 {
		fmt.Fprintf(&b, ":%d", p.Line)
	}
	if p.Line > 0 && p.Column > 0 {
		fmt.Fprintf(&b, ":%d", p.Column)
	}
	for _, part := range []string{p.Field, p.Message} {
		if part != "" {
			b.WriteString(": ")
			b.WriteString(part)
		}
	}
	if p.Cure != "" {
		b.WriteString("; ")
		b.WriteString(p.Cure)
	}
	return b.String()
}

// Problems is every mistake of a file, in the order of its lines. As an error
// it is one line a problem.
type Problems []Problem

func (ps Problems) Error() string {
	lines := make([]string, len(ps))
	for i, p := range ps {
		lines[i] = p.String()
	}
	return strings.Join(lines, "\n")
}

// sheet keeps the problems of one file while it is read.
type sheet struct {
	file     string
	problems Problems
}

// place is where something begins in a file; the zero place is the whole file.
type place struct{ line, column int }

func (s *sheet) complain(at place, field, message, cure string) {
	s.problems = append(s.problems, Problem{
		File: s.file, Line: at.line, Column: at.column,
		Field: field, Message: message, Cure: cure,
	})
}

// err returns the problems in the order of their places, or nil.
func (s *sheet) err() error {
	if len(s.problems) == 0 {
		return nil
	}
	s.sort()
	return s.problems
}

// sort brings the problems into the order of their places.
func (s *sheet) sort() {
	slices.SortStableFunc(s.problems, func(a, b Problem) int {
		return cmp.Or(cmp.Compare(a.Line, b.Line), cmp.Compare(a.Column, b.Column))
	})
}
