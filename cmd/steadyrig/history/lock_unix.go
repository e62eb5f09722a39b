//go:build darwin || dragonfly || freebsd || linux || netbsd || openbsd

package history

import (
	"errors"
	"os"
	"syscall"
	"time"
)

// lockTries times lockPause is how long another writer is waited for: entries are written in milliseconds.
const (
	lockTries = 200
	lockPause = 25 * time.Millisecond
)

var errLocked = errors.New("another program holds it locked")

// lock takes the file for this writer alone until it is closed; a writer that dies gives it back.
func lock(f *os.File) error {
	for range lockTries {
		err := syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB)
		if !errors.Is(err, syscall.EWOULDBLOCK) && !errors.Is(err, syscall.EINTR) {
			return err
		}
		time.Sleep(lockPause)
	}
	return errLocked
}
