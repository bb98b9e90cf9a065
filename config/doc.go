// Package config reads the two files an operator writes: the register of
// stands and sources (GeoJSON, RFC 7946) and saprolite.yaml.
//
// Both are decoded strictly. Nothing is guessed and nothing is passed over: a
// property nobody knows, one given twice, a value of the wrong type or out of
// range is a Problem that names file, line, column and cure, and all problems
// of a file are returned at once as Problems. What may be left out has a
// default, given with its source where the default is defined.
//
// LoadRegister and Load read one of them, LoadBoth the two; Together finds what
// only shows when both are read side by side. Register.Draws says which source a
// stand takes each quantity from, and Register.Coverage what can be answered
// with them.
//
// Use it in cmd, and only there: a component takes its own options, so that it
// can be built and tested without any file.
//
// How it is made: json.go and yaml.go turn text into the same tree of nodes,
// each with its place (node.go); section.go reads properties off that tree by
// name and type and keeps the problems; everything else says what is expected.
package config
