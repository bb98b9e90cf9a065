package config

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// section reads the properties of one object: each is asked for by name and
// type, and done complains of those nobody asked for. A property that is wrong
// is complained of and read as not given, so that reading goes on and finds
// the next mistake too.
type section struct {
	*sheet
	node  *node
	path  string   // how a problem names this object; empty at the top
	known []string // what was asked for
	later []string // what is in the design, but not in this version
	wrong bool     // not an object, which has been complained of
}

// rule judges a value of the right type: what is wrong with it, and the cure;
// both empty when it is good.
type rule[T any] func(T) (wrong, cure string)

// section opens an object. Anything else is complained of and read as empty.
func (s *sheet) section(n *node, path string) *section {
	if n == nil {
		return &section{sheet: s, node: &node{kind: object}, path: path}
	}
	if n.kind != object {
		s.complain(n.at, path, "want an object (name: value), got "+n.noun(), "write names with their values")
		return &section{sheet: s, node: &node{kind: object, at: n.at}, path: path, wrong: true}
	}
	sec := &section{sheet: s, node: n, path: path}
	first := make(map[string]int, len(n.fields))
	for _, f := range n.fields {
		if line, twice := first[f.name]; twice {
			s.complain(f.at, sec.field(f.name), fmt.Sprintf("given twice, first on line %d", line), "keep one of them")
			continue
		}
		first[f.name] = f.at.line
	}
	return sec
}

// field names a property for a problem.
func (s *section) field(name string) string {
	switch {
	case s.path == "":
		return name
	case strings.Contains(s.path, " ") && !strings.Contains(s.path, ": "):
		return s.path + ": " + clip(name) // "stand north-slope: p50_mpa"
	}
	return s.path + "." + clip(name) // "stand north-slope: sources.precipitation", "broker.embedded.listen"
}

// take returns a property's node, nil when it is absent or null.
func (s *section) take(name string) *node {
	s.known = append(s.known, name)
	return s.node.get(name)
}

// required complains if a property is absent, and returns it if it is there.
func (s *section) required(name, cure string) *node {
	n := s.node.get(name)
	if n == nil && !s.wrong {
		s.complain(s.node.at, s.field(name), "missing", cure)
	}
	return n
}

// of returns a property if it has the wanted kind.
func (s *section) of(name string, want kind, hint string) *node {
	n := s.take(name)
	if n == nil {
		return nil
	}
	if n.kind != want {
		if hint == "" {
			hint = "write " + want.String()
		}
		if want == text && (n.kind == number || n.kind == boolean) {
			hint = "put it in quotes"
		}
		s.complain(n.at, s.field(name), fmt.Sprintf("want %v, got %s", want, n.noun()), hint)
		return nil
	}
	return n
}

// open opens a property that is an object; given tells whether it was there.
func (s *section) open(name string) (sec *section, given bool) {
	n := s.take(name)
	return s.sheet.section(n, s.field(name)), n != nil
}

// text reads a text; absent when it is not given or wrong.
func (s *section) text(name, absent string, rules ...rule[string]) string {
	n := s.of(name, text, "")
	if n == nil || !obey(s, n, s.field(name), n.text, rules) {
		return absent
	}
	return n.text
}

// number reads a finite number; absent when it is not given or wrong.
func (s *section) number(name string, absent float64, rules ...rule[float64]) float64 {
	n := s.of(name, number, "write a number without quotes and without a unit")
	if n == nil {
		return absent
	}
	if math.IsNaN(n.number) || math.IsInf(n.number, 0) {
		s.complain(n.at, s.field(name), "want a finite number", "leave it out if it is not known")
		return absent
	}
	if !obey(s, n, s.field(name), n.number, rules) {
		return absent
	}
	return n.number
}

// whole reads a whole number; absent when it is not given or wrong.
func (s *section) whole(name string, absent int, rules ...rule[float64]) int {
	return int(s.number(name, float64(absent), append([]rule[float64]{isWhole}, rules...)...))
}

func isWhole(v float64) (string, string) {
	if v != math.Trunc(v) {
		return fmt.Sprintf("%v is not a whole number", v), fmt.Sprintf("write %.0f or %.0f", math.Floor(v), math.Ceil(v))
	}
	return "", ""
}

// texts reads a list of different texts. A single text is a list of one.
func (s *section) texts(name string, rules ...rule[string]) []string {
	n := s.take(name)
	if n == nil {
		return nil
	}
	return s.textsOf(n, s.field(name), rules...)
}

func (s *sheet) textsOf(n *node, path string, rules ...rule[string]) []string {
	items := n.list()
	if n.kind == text {
		items = []node{*n}
	} else if n.kind != list {
		s.complain(n.at, path, "want a list of texts, got "+n.noun(), `write ["one", "two"]`)
		return nil
	}
	var out []string
	for i := range items {
		item := &items[i]
		switch {
		case item.kind != text:
			s.complain(item.at, path, "want text, got "+item.noun(), "put it in quotes")
		case slices.Contains(out, item.text):
			s.complain(item.at, path, fmt.Sprintf("%q is listed twice", clip(item.text)), "keep one of them")
		case obey(s, item, path, item.text, rules):
			out = append(out, item.text)
		}
	}
	return out
}

// done complains of every property nobody asked for.
func (s *section) done() {
	for _, f := range s.node.fields {
		if slices.Contains(s.known, f.name) {
			continue
		}
		if slices.Contains(s.later, f.name) {
			s.complain(f.at, s.field(f.name), "not in this version yet", "remove it")
			continue
		}
		cure := suggest(f.name, s.known)
		if strings.HasPrefix(cure, knownHere) {
			cure = "remove it; " + cure
		}
		s.complain(f.at, s.field(f.name), "unknown", cure)
	}
}

// complainAt complains of a property of this section, at its value if it is
// there and at the object if it is not.
func (s *section) complainAt(name, message, cure string) {
	at := s.node.at
	if n := s.node.get(name); n != nil {
		at = n.at
	}
	s.complain(at, s.field(name), message, cure)
}

// judger is a sheet or a section.
type judger interface {
	complain(at place, field, message, cure string)
}

// obey holds a value against rules; the first that is broken is complained of.
func obey[T any](j judger, n *node, path string, v T, rules []rule[T]) bool {
	for _, r := range rules {
		if wrong, cure := r(v); wrong != "" {
			j.complain(n.at, path, wrong, cure)
			return false
		}
	}
	return true
}
