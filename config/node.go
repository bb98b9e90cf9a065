package config

import "fmt"

// node is one value of a file, GeoJSON or YAML alike, with its place.
type node struct {
	kind   kind
	yes    bool // of a boolean
	at     place
	number float64 // of a number
	text   string  // of a text
	items  []node  // of a list
	fields []field // of an object, in the order written
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
