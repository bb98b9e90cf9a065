package config

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"unicode/utf8"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// parseYAML reads one YAML document into nodes. Only plain data is taken:
// anchors, aliases, merge keys and tags are refused, so that what is written
// in a place is what holds there.
func (s *sheet) parseYAML(data []byte) (root node, ok bool) {
	data = bytes.TrimPrefix(data, []byte("\ufeff"))
	if !utf8.Valid(data) {
		s.complain(placeOf(data, invalidUTF8(data)), "", "not UTF-8 here", "save the file as UTF-8")
		return node{}, false
	}
	file, err := parser.ParseBytes(data, 0, parser.AllowDuplicateMapKey()) // section.go names both places of a duplicate
	if err != nil {
		at, message := place{}, err.Error()
		if y := yaml.Error(nil); errors.As(err, &y) {
			at, message = tokenPlace(y.GetToken()), y.GetMessage()
		}
		s.complain(at, "", "not YAML: "+message, "correct the line; indent with spaces, and put text with : or # in quotes")
		return node{}, false
	}
	var bodies []ast.Node
	for _, d := range file.Docs {
		if d.Body != nil && d.Body.Type() != ast.CommentType {
			bodies = append(bodies, d.Body)
		}
	}
	if len(bodies) == 0 {
		return node{kind: object, at: place{1, 1}}, true // an empty file takes every default
	}
	for _, second := range bodies[1:] {
		s.complain(s.yamlNode(second).at, "", "a second document begins here", "keep one document: remove the line ---")
	}
	return s.yamlNode(bodies[0]), true
}

func tokenPlace(t *token.Token) place {
	if t == nil || t.Position == nil {
		return place{}
	}
	return place{t.Position.Line, t.Position.Column}
}

func (s *sheet) yamlNode(from ast.Node) node {
	if from == nil {
		return node{}
	}
	n := node{at: tokenPlace(from.GetToken())}
	switch v := from.(type) {
	case *ast.NullNode:
	case *ast.BoolNode:
		n.kind, n.yes = boolean, v.Value
	case *ast.IntegerNode:
		n.kind, n.number = number, integer(v.Value)
	case *ast.FloatNode:
		n.kind, n.number = number, v.Value
	case *ast.InfinityNode:
		n.kind, n.number = number, v.Value
	case *ast.NanNode:
		n.kind, n.number = number, math.NaN()
	case *ast.StringNode:
		n.kind, n.text = text, v.Value
	case *ast.LiteralNode:
		n.kind, n.text = text, v.Value.Value
	case *ast.SequenceNode:
		n.kind = list
		for _, item := range v.Values {
			n.items = append(n.items, s.yamlNode(item))
		}
	case *ast.MappingNode:
		n.kind = object
		for _, entry := range v.Values {
			n.fields = append(n.fields, s.yamlField(entry))
		}
		if len(n.fields) > 0 && !v.IsFlowStyle {
			n.at = n.fields[0].at
		}
	case *ast.MappingValueNode:
		n.kind, n.fields = object, []field{s.yamlField(v)}
		n.at = n.fields[0].at
	default:
		s.complain(n.at, "", fmt.Sprintf("YAML's %s is not read here", yamlName(from)), "write the value itself")
	}
	return n
}

func (s *sheet) yamlField(entry *ast.MappingValueNode) field {
	f := field{at: tokenPlace(entry.Key.GetToken()), value: s.yamlNode(entry.Value)}
	switch key := entry.Key.(type) {
	case *ast.StringNode:
		f.name = key.Value
	default:
		// A key such as 12 or true: take it as written, so that it is named as
		// the unknown property it is.
		f.name = entry.Key.GetToken().Value
	}
	return f
}

func yamlName(n ast.Node) string {
	switch n.(type) {
	case *ast.AnchorNode:
		return "anchor (&)"
	case *ast.AliasNode:
		return "alias (*)"
	case *ast.TagNode:
		return "tag (!)"
	case *ast.MergeKeyNode:
		return "merge key (<<)"
	}
	return n.Type().String()
}

func integer(v any) float64 {
	switch i := v.(type) {
	case int64:
		return float64(i)
	case uint64:
		return float64(i)
	}
	return math.NaN()
}
