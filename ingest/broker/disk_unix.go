//go:build linux || darwin || freebsd

package broker

import "golang.org/x/sys/unix"

// freeDisk is what an ordinary user may still write, in bytes.
func freeDisk(dir string) (free int64, known bool, err error) {
	var s unix.Statfs_t
	if err := unix.Statfs(dir, &s); err != nil {
		return 0, false, err
	}
	return int64(s.Bavail) * int64(s.Bsize), true, nil
}
