package config

import (
	"fmt"
	"maps"
	"slices"
)

// Together returns the mistakes that show only when both files are read: a
// source of a feed that is not there, a limit for a source nobody knows, a
// destination for a group no stand is in. Nil when there are none.
func Together(c *Config, r *Register) Problems {
	var out Problems
	complain := func(line int, file, field, message, cure string) {
		out = append(out, Problem{File: file, Line: line, Field: field, Message: message, Cure: cure})
	}
	feeds := map[string]bool{}
	for _, f := range c.Feeds {
		feeds[f.Name] = true
	}
	for _, s := range r.Positioned {
		if s.Feed != "" && !feeds[s.Feed] {
			complain(s.Line, r.File, "source "+s.ID+": feed", fmt.Sprintf("no feed %q in %s", s.Feed, c.File), "add it under feeds there, or correct the name")
		}
	}
	for _, l := range c.Limits {
		if _, known := r.known[l.Source]; l.Source != "" && !known {
			complain(0, c.File, "limits."+l.Source, "no such source in "+r.File, "correct the name, or remove it")
		}
	}
	groups := map[string]bool{}
	for i := range r.Stands {
		for _, g := range r.Stands[i].Groups {
			groups[g] = true
		}
	}
	for _, d := range c.Destinations {
		for _, g := range d.Groups {
			if !groups[g] {
				complain(0, c.File, "destination "+d.Name+": groups", fmt.Sprintf("no stand in %s is in group %q", r.File, g), suggest(g, slices.Sorted(maps.Keys(groups))))
			}
		}
	}
	return out
}
