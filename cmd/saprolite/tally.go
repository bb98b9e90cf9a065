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
	rows        int
	sources     map[string]struct{}
	first, last time.Time
	low, high   float64
	sum         float64
}

func (t *tally) add(o observation.Observation) {
	if *t == nil {
		*t = tally{}
	}
	q := (*t)[o.Quantity]
	if q == nil {
		q = &tallied{sources: map[string]struct{}{}, first: o.Start, last: o.Start, low: math.Inf(1), high: math.Inf(-1)}
		(*t)[o.Quantity] = q
	}
	q.rows++
	q.sources[o.Source] = struct{}{}
	if o.Start.Before(q.first) {
		q.first = o.Start
	}
	if o.Start.After(q.last) {
		q.last = o.Start
	}
	if !math.IsNaN(o.Value) {
		q.low, q.high = math.Min(q.low, o.Value), math.Max(q.high, o.Value)
		q.sum += o.Value
	}
}

// say writes a line a quantity.
func (t tally) say(w io.Writer) {
	const year = 365*24*time.Hour + 5*time.Hour + 49*time.Minute // Gregorian calendar, to the minute
	out := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	for _, name := range slices.Sorted(maps.Keys(t)) {
		q := t[name]
		info, _ := name.Info()
		fmt.Fprintf(out, "  %s\t%d rows\t%d sources\t%s to %s\t%.5g to %.5g %s", name, q.rows, len(q.sources),
			q.first.Format(time.DateOnly), q.last.Format(time.DateOnly), q.low, q.high, info.Unit)
		if span := q.last.Sub(q.first) + 24*time.Hour; info.Fold == quantity.Total && span > year {
			fmt.Fprintf(out, "\t%.0f %s a year", q.sum/float64(len(q.sources))/(float64(span)/float64(year)), info.Unit)
		}
		fmt.Fprintln(out)
	}
	out.Flush()
}
