package observation

import "fmt"

// ValidID tells what is wrong with the id of a stand, source or feed, which
// must be [a-z0-9][a-z0-9_-]{0,63} (design 5.1); nil when nothing is. Such an
// id is safe as part of a subject, a key, a file name and a label.
func ValidID(s string) error {
	const longest = 64
	switch {
	case s == "":
		return fmt.Errorf("the id is empty; want 1 to %d of a-z, 0-9, _ and -", longest)
	case len(s) > longest:
		return fmt.Errorf("the id %q... has %d bytes; want at most %d", s[:16], len(s), longest)
	case s[0] == '_' || s[0] == '-':
		return fmt.Errorf("the id %q starts with %q; want a letter or digit first", s, s[0])
	}
	for _, r := range s {
		if (r < 'a' || r > 'z') && (r < '0' || r > '9') && r != '_' && r != '-' {
			return fmt.Errorf("the id %q contains %q; want only a-z, 0-9, _ and -", s, r)
		}
	}
	return nil
}
