package config

import (
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"path/filepath"
	"slices"
)

// LoadBoth reads saprolite.yaml and the stands file it names, and holds them
// against each other. The error is every mistake of both files, and what shows
// only when both are right (Together). If the settings do not say which stands
// file is meant, it is theirs alone.
func LoadBoth(file string) (*Config, *Register, error) {
	c, err := readSettings(file)
	if c == nil || c.Stands == "" {
		return nil, nil, err
	}
	r, standsErr := LoadRegister(c.Stands)
	if _, named := c.places["stands"]; !named && err != nil && errors.Is(standsErr, fs.ErrNotExist) {
		standsErr = nil // the file's true name may be among the mistakes of the settings
	}
	if err := errors.Join(err, standsErr); err != nil {
		return nil, nil, err
	}
	if problems := Together(c, r); len(problems) > 0 {
		return nil, nil, problems
	}
	return c, r, nil
}

// Fields of what only Together can judge, as a problem names them.
func sourceLimitField(source string) string { return "limits." + clip(source) }
func groupField(destination, group string) string {
	return fmt.Sprintf("destination %s: group %s", destination, clip(group))
}

// Together returns the mistakes that show only when both files are read: a
// source of a feed that is not there, a limit for a source nobody knows, a
// destination for a group no stand is in. Nil when there are none.
func Together(c *Config, r *Register) Problems {
	stands, settings := &sheet{file: r.File}, &sheet{file: filepath.ToSlash(c.File)}
	feeds := map[string]bool{}
	for _, f := range c.Feeds {
		feeds[f.Name] = true
	}
	for _, s := range r.Positioned {
		if s.Feed != "" && !feeds[s.Feed] {
			stands.complain(place{line: s.Line}, "source "+s.ID+": feed", fmt.Sprintf("no feed %q in %s", s.Feed, c.File), "add it under feeds there, or correct the name")
		}
	}
	told := map[string]bool{}
	for _, l := range c.Limits {
		if l.Source == "" || r.Known(l.Source) || told[l.Source] {
			continue
		}
		told[l.Source] = true
		field := sourceLimitField(l.Source)
		settings.complain(c.places[field], field, "no such source in "+r.File, "correct the name, or remove it")
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
				field := groupField(d.Name, g)
				settings.complain(c.places[field], field, "no stand in "+r.File+" is in it", suggest(g, slices.Sorted(maps.Keys(groups))))
			}
		}
	}
	stands.sort()
	settings.sort()
	return append(stands.problems, settings.problems...)
}
