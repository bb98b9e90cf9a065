package config

import "fmt"

// node is one value of a file, GeoJSON or YAML alike, with its place.
type node struct {
	kind   kind
	yes    bool // of a boolean
	at     place
	number float64 // of a number
	text   string  // of a text
	items  []node  // of a list; read it by list
	// numbers are a list in which there is nothing else, which is most of a
	// GeoJSON file: a tenth of the memory of items.
	numbers []float64
	fields  []field // of an object, in the order written
}

// field is one property of an object.
type field struct {
	name  string
	at    place
	value node
}

type kind uint8

const (
	null kind = iota
	boolean
	number
	text
	list
	object
)

func (k kind) String() string {
	return [...]string{"nothing", "true or false", "a number", "text", "a list", "an object"}[k]
}

// noun says what a node is, with its value where that helps to find it.
func (n *node) noun() string {
	switch n.kind {
	case text:
		return fmt.Sprintf("text %q", clip(n.text))
	case number:
		return fmt.Sprintf("the number %v", n.number)
	case boolean:
		return fmt.Sprintf("%v", n.yes)
	}
	return n.kind.String()
}

// clip keeps a text short enough for a message.
func clip(s string) string {
	const most = 60
	if r := []rune(s); len(r) > most {
		return string(r[:most]) + "..."
	}
	return s
}

// list returns the values of a list. Those of bare numbers have the place of
// the list.
func (n *node) list() []node {
	if n.numbers == nil {
		return n.items
	}
	items := make([]node, len(n.numbers))
	for i, v := range n.numbers {
		items[i] = node{kind: number, at: n.at, number: v}
	}
	return items
}

// bare returns the numbers of a list, and the first value that is none.
func (n *node) bare() (numbers []float64, other *node) {
	if n.numbers != nil {
		return n.numbers, nil
	}
	for i := range n.items {
		if n.items[i].kind != number {
			return nil, &n.items[i]
		}
		numbers = append(numbers, n.items[i].number)
	}
	return numbers, nil
}

// get finds a property; nil when it is absent or null. Writing null says "not
// given", as GIS programs do for an empty cell and YAML for an empty section.
func (n *node) get(name string) *node {
	for i := range n.fields {
		if f := &n.fields[i]; f.name == name && f.value.kind != null {
			return &f.value
		}
	}
	return nil
}
