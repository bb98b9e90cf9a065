package config

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"unicode/utf8"
)

// parseJSON reads one JSON text into nodes. encoding/json judges the syntax,
// trailing data included; the walk below only cuts what it has found good, and
// keeps the places encoding/json does not give.
func (s *sheet) parseJSON(data []byte) (root node, ok bool) {
	data = bytes.TrimPrefix(data, []byte("\ufeff")) // RFC 8259 section 8.1 lets a reader pass over it
	if !utf8.Valid(data) {
		s.complain(placeOf(data, invalidUTF8(data)), "", "not UTF-8 here", "save the file as UTF-8")
		return node{}, false
	}
	var raw json.RawMessage
	if err := json.Unmarshal(data, &raw); err != nil {
		at, message := place{}, err.Error()
		if syntax := (*json.SyntaxError)(nil); errors.As(err, &syntax) {
			at = placeOf(data, int(syntax.Offset)-1)
		}
		s.complain(at, "", "not JSON: "+message, "correct the text here, or write the file again from the program it came from")
		return node{}, false
	}
	w := walker{sheet: s, data: data, line: 1}
	return w.value(), true
}

func invalidUTF8(data []byte) int {
	for i := 0; i < len(data); {
		r, size := utf8.DecodeRune(data[i:])
		if r == utf8.RuneError && size == 1 {
			return i
		}
		i += size
	}
	return len(data)
}

func placeOf(data []byte, offset int) place {
	before := data[:min(max(offset, 0), len(data))]
	return place{
		line:   1 + bytes.Count(before, []byte("\n")),
		column: len(before) - bytes.LastIndexByte(before, '\n'),
	}
}

// walker cuts valid JSON. Its recursion is bounded by encoding/json, which
// refuses a nesting deeper than 10,000.
type walker struct {
	*sheet
	data      []byte
	pos       int
	line      int       // of pos
	lineStart int       // offset at which that line begins
	open      []node    // values of lists not yet closed, so that a list is allocated once, at its length
	numbers   []float64 // of lists of numbers; cut from a common piece
}

// next skips white space and separators and returns the first byte of what
// follows.
func (w *walker) next() byte {
	for ; ; w.pos++ {
		switch c := w.data[w.pos]; c {
		case '\n':
			w.line, w.lineStart = w.line+1, w.pos+1
		case ' ', '\t', '\r', ',', ':':
		default:
			return c
		}
	}
}

func (w *walker) here() place { return place{w.line, w.pos - w.lineStart + 1} }

func (w *walker) value() node {
	c := w.next()
	n := node{at: w.here()}
	switch c {
	case '{':
		n.kind = object
		for w.pos++; w.next() != '}'; {
			f := field{at: w.here()}
			f.name = w.string()
			f.value = w.value()
			n.fields = append(n.fields, f)
		}
		w.pos++
	case '[':
		n.kind = list
		w.list(&n)
	case '"':
		n.kind, n.text = text, w.string()
	case 't':
		n.kind, n.yes, w.pos = boolean, true, w.pos+len("true")
	case 'f':
		n.kind, w.pos = boolean, w.pos+len("false")
	case 'n':
		n.kind, w.pos = null, w.pos+len("null")
	default:
		n.kind, n.number = number, w.number(n.at)
	}
	return n
}

func (w *walker) list(n *node) {
	first, bare := len(w.open), true
	for w.pos++; w.next() != ']'; {
		item := w.value()
		bare = bare && item.kind == number
		w.open = append(w.open, item)
	}
	w.pos++
	items := w.open[first:]
	switch {
	case len(items) == 0:
	case bare:
		if cap(w.numbers)-len(w.numbers) < len(items) {
			w.numbers = make([]float64, 0, max(len(items), 4096))
		}
		from := len(w.numbers)
		for i := range items {
			w.numbers = append(w.numbers, items[i].number)
		}
		n.numbers = w.numbers[from:len(w.numbers):len(w.numbers)]
	default:
		n.items = slices.Clone(items)
	}
	w.open = w.open[:first]
}

func (w *walker) number(at place) float64 {
	start := w.pos
digits:
	for ; w.pos < len(w.data); w.pos++ {
		switch w.data[w.pos] {
		case '0', '1', '2', '3', '4', '5', '6', '7', '8', '9', '+', '-', '.', 'e', 'E':
		default:
			break digits
		}
	}
	v, err := strconv.ParseFloat(string(w.data[start:w.pos]), 64)
	if err != nil { // only the range can be wrong
		w.complain(at, "", fmt.Sprintf("the number %s is too large", clip(string(w.data[start:w.pos]))), "correct it")
		return 0
	}
	return v
}

func (w *walker) string() string {
	start, escaped := w.pos, false
	for w.pos++; w.data[w.pos] != '"'; w.pos++ {
		if w.data[w.pos] == '\\' {
			escaped = true
			w.pos++
		}
	}
	w.pos++
	if !escaped {
		return string(w.data[start+1 : w.pos-1])
	}
	var s string
	_ = json.Unmarshal(w.data[start:w.pos], &s) // cannot fail: the text was judged valid before
	return s
}
