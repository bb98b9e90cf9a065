package wire

import (
	"bytes"
	"encoding/json"
	"errors"
	"strings"
	"unicode/utf8"
)

const (
	maxNesting = 16 // of arrays and objects; a pack needs 2 (reliability case 25)
	maxLabels  = 64 // of one object; SenML registers 17
)

// member is one label of a record with its value as written.
type member struct {
	label string
	raw   []byte
	at    int // byte position of the label
}

// scan takes a pack apart into the members of its records, and refuses what
// encoding/json would let pass: duplicate labels, labels in other letter case,
// bytes that are not UTF-8, NUL, and nesting without end (reliability case 25).
func scan(data []byte) ([][]member, *Problem) {
	if len(data) > MaxSenML {
		return nil, problem(TooLarge, "", "the pack has %d bytes; send at most %d at once", len(data), MaxSenML)
	}
	if !utf8.Valid(data) {
		return nil, at(firstInvalid(data), problem(Unreadable, "", "not UTF-8 text"))
	}
	if !json.Valid(data) {
		return nil, syntaxProblem(data)
	}
	s := scanner{data: data}
	records := s.pack()
	if s.wrong != nil {
		return nil, s.wrong
	}
	return records, nil
}

func at(i int, p *Problem) *Problem {
	p.Byte = i
	return p
}

func firstInvalid(data []byte) int {
	for i := 0; i < len(data); {
		r, n := utf8.DecodeRune(data[i:])
		if r == utf8.RuneError && n == 1 {
			return i
		}
		i += n
	}
	return len(data)
}

func syntaxProblem(data []byte) *Problem {
	var raw json.RawMessage
	err := json.Unmarshal(data, &raw)
	p := problem(Unreadable, "", "not JSON: %v", err)
	var syntax *json.SyntaxError
	if errors.As(err, &syntax) {
		p.Byte = max(int(syntax.Offset)-1, 0) // Offset counts the offending byte
	}
	return p
}

// scanner walks over JSON that is known to be valid.
type scanner struct {
	data  []byte
	i     int
	wrong *Problem
}

func (s *scanner) refuse(i int, p *Problem) {
	if s.wrong == nil {
		s.wrong = at(i, p)
	}
}

func (s *scanner) space() byte {
	for s.i < len(s.data) && strings.IndexByte(" \t\r\n", s.data[s.i]) >= 0 {
		s.i++
	}
	if s.i == len(s.data) {
		return 0
	}
	return s.data[s.i]
}

// pack reads the outer array.
func (s *scanner) pack() (records [][]member) {
	if s.space() != '[' {
		s.refuse(s.i, problem(Unreadable, "", "want a SenML pack, an array of records: [{...}]"))
		return nil
	}
	s.i++
	for c := s.space(); c != ']' && s.wrong == nil; c = s.space() {
		if c == ',' {
			s.i++
			continue
		}
		if c != '{' {
			s.refuse(s.i, problem(Unreadable, "", "record %d is not an object; want {\"n\":...,\"v\":...}", len(records)+1))
			return nil
		}
		records = append(records, s.object(2, true))
	}
	if len(records) == 0 {
		s.refuse(0, problem(Unreadable, "", "the pack is empty; want at least one record"))
	}
	return records
}

// object reads an object at the given nesting; its members are kept if keep.
func (s *scanner) object(nesting int, keep bool) (members []member) {
	s.nest(nesting)
	var labels []string
	s.i++
	for c := s.space(); c != '}' && s.wrong == nil; c = s.space() {
		if c == ',' {
			s.i++
			continue
		}
		from := s.i
		label := s.label()
		if len(labels) == maxLabels {
			s.refuse(from, problem(TooLarge, "", "an object has more than %d labels", maxLabels))
		}
		s.unique(from, label, labels, keep)
		labels = append(labels, label)
		s.space() // to the colon
		s.i++
		s.space()
		value := s.i
		s.value(nesting)
		if keep {
			members = append(members, member{label: label, raw: s.data[value:s.i], at: from})
		}
	}
	s.i++
	return members
}

func (s *scanner) nest(nesting int) {
	if nesting > maxNesting {
		s.refuse(s.i, problem(TooLarge, "", "nested more than %d deep", maxNesting))
	}
}

// unique refuses a label that is there already, in whatever letter case, and
// in a record one that differs from SenML's only by its case.
func (s *scanner) unique(from int, label string, before []string, inRecord bool) {
	for _, other := range before {
		if label == other {
			s.refuse(from, problem(DuplicateKey, brief(label), "comes twice in one object; which one counts is not known"))
		} else if strings.EqualFold(label, other) {
			s.refuse(from, problem(DuplicateKey, brief(label), "differs from %s only in letter case", brief(other)))
		}
	}
	if !inRecord {
		return
	}
	for _, known := range knownLabels {
		if label != known && strings.EqualFold(label, known) {
			s.refuse(from, problem(DuplicateKey, brief(label), "differs from SenML's %q only in letter case; labels are case-sensitive", known))
		}
	}
}

// label reads a string and returns what it says.
func (s *scanner) label() string {
	from := s.i
	s.text()
	text, err := unquote(s.data[from:s.i])
	if err != nil {
		s.refuse(from, problem(Unreadable, "", "unreadable label: %v", err))
	}
	return text
}

// text moves past a string.
func (s *scanner) text() {
	for s.i++; s.data[s.i] != '"'; s.i++ {
		if s.data[s.i] == '\\' {
			if bytes.HasPrefix(s.data[s.i:], []byte(`\u0000`)) {
				s.refuse(s.i, problem(Unreadable, "", "a text holds a NUL character"))
			}
			s.i++
		}
	}
	s.i++
}

// value moves past any value.
func (s *scanner) value(nesting int) {
	switch s.space() {
	case '{':
		s.object(nesting+1, false)
	case '[':
		s.nest(nesting + 1)
		s.i++
		for c := s.space(); c != ']' && s.wrong == nil; c = s.space() {
			if c == ',' {
				s.i++
				continue
			}
			s.value(nesting + 1)
		}
		s.i++
	case '"':
		s.text()
	default:
		for s.i < len(s.data) && strings.IndexByte(",]} \t\r\n", s.data[s.i]) < 0 {
			s.i++
		}
	}
}

// unquote returns what a JSON string says.
func unquote(raw []byte) (string, error) {
	if bytes.IndexByte(raw, '\\') < 0 {
		return string(raw[1 : len(raw)-1]), nil
	}
	var text string
	err := json.Unmarshal(raw, &text)
	return text, err
}
