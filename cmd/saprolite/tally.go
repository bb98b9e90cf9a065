package main

import (
	"fmt"
	"io"
	"maps"
	"math"
	"slices"
	"text/tabwriter"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// tally is what a history says in sum, so that whoever loads it sees a wrong
// unit or a wrong year at a glance: rain of 1.2 mm a year was in metres.
type tally map[quantity.Quantity]*tallied

type tallied struct {
	rows      int
	sources   map[string]*span
	low, high float64
	sum       float64
}

type span struct{ first, last time.Time }

func (s *span) with(t time.Time) {
	if s.first.IsZero() || t.Before(s.first) {
		s.first = t
	}
	if t.After(s.last) {
		s.last = t
	}
}

func (t *tally) add(o observation.Observation) {
	if *t == nil {
		*t = tally{}
	}
	q := (*t)[o.Quantity]
	if q == nil {
		q = &tallied{sources: map[string]*span{}, low: math.Inf(1), high: math.Inf(-1)}
		(*t)[o.Quantity] = q
	}
	q.rows++
	source := q.sources[o.Source]
	if source == nil {
		source = &span{}
		q.sources[o.Source] = source
	}
	source.with(o.Start)
	if !math.IsNaN(o.Value) {
		q.low, q.high = math.Min(q.low, o.Value), math.Max(q.high, o.Value)
		q.sum += o.Value
	}
}

// say writes a line a quantity.
func (t tally) say(w io.Writer) {
	const day, year = 24 * time.Hour, 365 * 24 * time.Hour // to show, not to compute with
	out := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	for _, name := range slices.Sorted(maps.Keys(t)) {
		q, all, years := t[name], span{}, 0.0
		for _, s := range q.sources {
			all.with(s.first)
			all.with(s.last)
			years += float64(s.last.Sub(s.first)+day) / float64(year)
		}
		info, _ := name.Info()
		values := "no values"
		if q.low <= q.high {
			values = fmt.Sprintf("%.5g to %.5g %s", q.low, q.high, info.Unit)
		}
		fmt.Fprintf(out, "  %s\t%s\t%s\t%s to %s\t%s", name, counted(q.rows, "row"), counted(len(q.sources), "source"), all.first.Format(time.DateOnly), all.last.Format(time.DateOnly), values)
		if info.Fold == quantity.Total && years >= float64(len(q.sources)) {
			fmt.Fprintf(out, "\t%.0f %s a year", q.sum/years, info.Unit)
		}
		fmt.Fprintln(out)
	}
	out.Flush()
}

func counted(n int, word string) string {
	if n == 1 {
		return "1 " + word
	}
	return fmt.Sprintf("%d %ss", n, word)
}
