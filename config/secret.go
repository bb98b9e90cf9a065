package config

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
)

// Secret is a password or key read from a file. However it is printed, logged
// or encoded it shows as "(secret)"; only Reveal gives it away.
type Secret struct{ value string }

const redacted = "(secret)"

// Reveal returns the secret itself, for the one place that must send it.
func (s Secret) Reveal() string { return s.value }

// Set tells whether there is a secret.
func (s Secret) Set() bool { return s.value != "" }

func (s Secret) String() string               { return redacted }
func (s Secret) GoString() string             { return redacted }
func (s Secret) MarshalText() ([]byte, error) { return []byte(redacted), nil }
func (s Secret) MarshalJSON() ([]byte, error) { return []byte(`"` + redacted + `"`), nil }

// Format answers every verb the same.
func (s Secret) Format(f fmt.State, _ rune) { _, _ = f.Write([]byte(redacted)) }

// longestSecret is far above any key and far below a mistaken data file.
const longestSecret = 64 << 10

// findFile says where a file named in saprolite.yaml is: as written if the
// path is absolute; else in $CREDENTIALS_DIRECTORY, where systemd's
// LoadCredential puts it, if it is there; else beside the yaml file.
func (l *loader) findFile(path string) string {
	if filepath.IsAbs(path) {
		return path
	}
	if l.credentials != "" {
		if inside := filepath.Join(l.credentials, path); exists(inside) {
			return inside
		}
	}
	return filepath.Join(l.dir, path)
}

func exists(path string) bool {
	info, err := os.Stat(path)
	return err == nil && info.Mode().IsRegular()
}

// secret reads the file that a property names; the line break at its end is
// not part of the secret.
func (l *loader) secret(s *section, name string) Secret {
	const one = "write the secret into it, on one line, readable by the daemon only"
	path := s.text(name, "", oneLine)
	if path == "" {
		return Secret{}
	}
	path = l.findFile(path)
	info, err := os.Stat(path)
	switch {
	case err != nil:
		s.complainAt(name, fmt.Sprintf("cannot read %s: %v", path, reason(err)), one)
		return Secret{}
	case !info.Mode().IsRegular():
		s.complainAt(name, path+" is not a file", one)
		return Secret{}
	case info.Size() > longestSecret:
		s.complainAt(name, fmt.Sprintf("%s has %d bytes, too many for a secret", path, info.Size()), one)
		return Secret{}
	}
	data, err := os.ReadFile(path)
	if err != nil {
		s.complainAt(name, fmt.Sprintf("cannot read %s: %v", path, reason(err)), one)
		return Secret{}
	}
	value := strings.TrimRight(string(data), "\r\n")
	switch {
	case value == "":
		s.complainAt(name, path+" is empty", one)
	case strings.ContainsAny(value, "\r\n\x00"):
		s.complainAt(name, path+" has more than one line", one)
	default:
		return Secret{value}
	}
	return Secret{}
}

// existing returns the path of a file a property names, which must be there.
func (l *loader) existing(s *section, name, cure string) string {
	path := s.text(name, "", oneLine)
	if path == "" {
		return ""
	}
	path = l.findFile(path)
	if _, err := os.Stat(path); err != nil {
		s.complainAt(name, fmt.Sprintf("cannot read %s: %v", path, reason(err)), cure)
		return ""
	}
	return path
}

// reason is the operating system's word without the path, which the message
// has already.
func reason(err error) error {
	if pe, ok := err.(*os.PathError); ok {
		return pe.Err
	}
	return err
}
