package broker

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/nats-io/nats.go"
)

const accessName = "operator.json"

// access is how this program's other commands reach the running daemon.
// It lies in the data folder, readable by its owner only, while the daemon
// runs. Its text forms hide the password.
type access struct {
	URL      string `json:"url"`
	Server   string `json:"server"` // the name the server at URL must answer with
	User     string `json:"user"`
	Password string `json:"password"`
}

func (a access) String() string   { return fmt.Sprintf("%s as %s", a.URL, a.User) }
func (a access) GoString() string { return a.String() }

// write replaces the file at once, so that a reader never sees half of it.
func (a access) write(dir string) error {
	const op = "writing the operator's access"
	text, err := json.MarshalIndent(a, "", "  ")
	if err != nil {
		return wrap(op, err)
	}
	f, err := os.CreateTemp(dir, accessName+".*") // 0600 by its contract
	if err != nil {
		return folderError(op, dir, err)
	}
	_, err = f.Write(append(text, '\n'))
	err = errors.Join(err, f.Close())
	if err == nil {
		err = os.Rename(f.Name(), filepath.Join(dir, accessName))
	}
	if err != nil {
		return folderError(op, dir, errors.Join(err, os.Remove(f.Name())))
	}
	return nil
}

func removeAccess(dir string) error {
	if err := os.Remove(filepath.Join(dir, accessName)); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return folderError("removing the operator's access", dir, err)
	}
	return nil
}

func readAccess(dir string) (access, error) {
	const op = "looking for a running daemon"
	path := filepath.Join(dir, accessName)
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return access{}, &Error{Code: NotRunning, Op: op, Err: fmt.Errorf("no %s", path)}
	}
	if errors.Is(err, fs.ErrPermission) {
		return access{}, &Error{Code: Refused, Op: op, Err: err, Hint: "run the command as the daemon's user"}
	}
	if err != nil {
		return access{}, folderError(op, dir, err)
	}
	var a access
	if err := json.Unmarshal(text, &a); err != nil {
		return access{}, &Error{Code: Invalid, Op: op, Err: fmt.Errorf("%s: %w", path, err), Hint: "remove the file and start the daemon again"}
	}
	return a, nil
}

// credentials turns a credentials file into a connection option.
func credentials(path string) (nats.Option, error) {
	const op = "reading the broker's credentials"
	if path == "" {
		return nil, nil
	}
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, &Error{Code: Invalid, Op: op, Err: err}
	}
	body := strings.TrimSpace(string(text))
	switch {
	case strings.Contains(body, "BEGIN NATS USER JWT"):
		return nats.UserCredentials(path), nil
	case strings.HasPrefix(body, "SU"):
		option, err := nats.NkeyOptionFromSeed(path)
		if err != nil {
			return nil, &Error{Code: Invalid, Op: op, Err: fmt.Errorf("%s: not a usable nkey seed", path)}
		}
		return option, nil
	}
	user, password, ok := strings.Cut(body, ":")
	if !ok || user == "" || strings.ContainsAny(body, "\r\n") {
		return nil, invalid(op, "%s: expected a NATS .creds file, an nkey seed (SU...), or one line user:password", path)
	}
	return nats.UserInfo(user, password), nil
}
