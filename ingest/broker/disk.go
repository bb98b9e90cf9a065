package broker

import (
	"errors"
	"fmt"
	"io/fs"
	"path/filepath"
)

// leastStore is the smallest store worth starting: eight blocks of the
// server's file store (8 MiB each). Common practice of the trade, no source.
const leastStore = 64 * mib

const roomOp = "looking for room on the disk"

// roomFor caps a wished store size below what the disk can hold: what the
// store has already plus what is free, less a tenth for indexes, compaction
// and batches on their way. A full disk wedges JetStream until the process
// restarts; a full store is answered at once and heals by itself.
func roomFor(dir string, wished int64) (int64, error) {
	free, known, err := freeDisk(dir)
	if err != nil {
		return 0, folderError(roomOp, dir, err)
	}
	if !known {
		return wished, nil
	}
	used, err := sizeOf(dir)
	if err != nil {
		return 0, folderError(roomOp, dir, err)
	}
	return capped(dir, free, used, wished)
}

func capped(dir string, free, used, wished int64) (int64, error) {
	room := (free + used) / 10 * 9
	if room < leastStore || free < leastStore/8 {
		return 0, &Error{Code: Full, Op: roomOp,
			Err:  fmt.Errorf("the disk of %s has %d MiB free and the store holds %d MiB: expected at least %d MiB in all and one eighth of that free", dir, free/mib, used/mib, int64(leastStore/mib)),
			Hint: "free some space or move the data folder"}
	}
	return min(wished, room), nil
}

// sizeOf adds up the files below dir; a missing folder holds nothing.
func sizeOf(dir string) (int64, error) {
	var sum int64
	err := filepath.WalkDir(dir, func(_ string, entry fs.DirEntry, err error) error {
		if err != nil || entry.IsDir() {
			return err
		}
		info, err := entry.Info()
		if err == nil {
			sum += info.Size()
		}
		return err
	})
	if errors.Is(err, fs.ErrNotExist) {
		return 0, nil
	}
	return sum, err
}
