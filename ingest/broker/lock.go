package broker

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"github.com/gofrs/flock"
)

const lockName = "broker.lock"

// folderLock keeps a second process out of a data folder. The server itself
// takes no lock: two of them on one folder lose acknowledged messages. The
// kernel releases the lock when the process dies; the file stays.
type folderLock struct{ file *flock.Flock }

func lockFolder(dir string) (*folderLock, error) {
	const op = "locking the data folder"
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return nil, folderError(op, dir, err)
	}
	path := filepath.Join(dir, lockName)
	f := flock.New(path, flock.SetPermissions(0o600))
	taken, err := f.TryLock()
	if err != nil {
		return nil, folderError(op, dir, err)
	}
	if !taken {
		pid := readPid(path)
		who := "another process"
		if pid > 0 {
			who = "process " + strconv.Itoa(pid)
		}
		return nil, &Error{Code: InUse, Op: op, Pid: pid, Err: fmt.Errorf("%s is used by %s", dir, who),
			Hint: "stop it first, or use another data folder"}
	}
	if err := os.WriteFile(path, []byte(strconv.Itoa(os.Getpid())+"\n"), 0o600); err != nil {
		return nil, errors.Join(folderError(op, dir, err), f.Unlock())
	}
	return &folderLock{f}, nil
}

// readPid is 0 when the file says nothing usable.
func readPid(path string) int {
	text, err := os.ReadFile(path)
	if err != nil {
		return 0
	}
	pid, err := strconv.Atoi(strings.TrimSpace(string(text)))
	if err != nil {
		return 0
	}
	return pid
}

func (l *folderLock) release() error {
	if l == nil {
		return nil
	}
	return l.file.Unlock()
}

func folderError(op, dir string, err error) error {
	return &Error{Code: Invalid, Op: op, Err: fmt.Errorf("data folder %s: %w", dir, err),
		Hint: "name a folder this user may write to"}
}
