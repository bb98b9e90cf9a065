package config

import (
	"fmt"

	"saprolite/ingest/quantity"
)

// Limit is a range of quality control set by the operator, for all sources or
// for one. A bound that was not given is NaN.
type Limit struct {
	Source    string // empty: every source
	Quantity  quantity.Quantity
	Low, High float64 // canonical unit, ends included
}

// limits reads quantity -> {low, high} for every source, and source ->
// quantity -> {low, high} for one.
func (l *loader) limits(top *section) []Limit {
	s, _ := top.open("limits")
	var out []Limit
	for i := range s.node.fields {
		f := &s.node.fields[i]
		if f.value.kind == null {
			continue
		}
		inner := l.section(&f.value, s.field(f.name))
		_, err := quantity.Parse(f.name)
		if err == nil || inner.node.get("low") != nil || inner.node.get("high") != nil {
			out = l.limit(out, s, inner, f, "")
			continue
		}
		if wrong, cure := isID(f.name); wrong != "" {
			s.complain(f.at, s.field(f.name), "neither a quantity nor a source: "+wrong, cure)
			continue
		}
		l.places[sourceLimitField(f.name)] = f.at
		for j := range inner.node.fields {
			g := &inner.node.fields[j]
			if g.value.kind != null {
				out = l.limit(out, inner, l.section(&g.value, inner.field(g.name)), g, f.name)
			}
		}
	}
	return out
}

func (l *loader) limit(out []Limit, parent, s *section, f *field, source string) []Limit {
	if wrong, cure := knownQuantity(f.name); wrong != "" {
		s.complain(f.at, parent.field(f.name), wrong, cure)
		return out
	}
	q, _ := quantity.Parse(f.name) // known
	info, _ := q.Info()
	unit := "the unit is " + info.Unit
	low, high := s.number("low", nan, between(info.Lo, info.Hi, info.Unit, unit)), s.number("high", nan, between(info.Lo, info.Hi, info.Unit, unit))
	if low >= high {
		s.complainAt("high", fmt.Sprintf("high %v is not above low %v", high, low), "swap or correct them")
	}
	if s.node.get("low") == nil && s.node.get("high") == nil {
		s.complain(f.at, parent.field(f.name), "gives neither low nor high", "write low, high or both, in "+info.Unit)
	}
	s.done()
	return append(out, Limit{source, q, low, high})
}

// Limit returns the range the operator set for a quantity of a source: the
// source's own bounds, else those for every source; NaN where none was set.
func (c *Config) Limit(source string, q quantity.Quantity) (low, high float64) {
	low, high = nan, nan
	for _, who := range []string{"", source} {
		for _, l := range c.Limits {
			if l.Source != who || l.Quantity != q && l.Quantity != q.Base() {
				continue
			}
			if l.Low == l.Low {
				low = l.Low
			}
			if l.High == l.High {
				high = l.High
			}
		}
	}
	return low, high
}
