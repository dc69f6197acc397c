package bus

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"golang.org/x/sys/unix"
)

const (
	lockFile = "lock"
	// lockTries times lockPause is how long takeLock rides over a probe by
	// Dial, which holds the lock for a moment.
	lockTries = 10
	lockPause = 10 * time.Millisecond
)

// lock is the exclusive hold of a folder. The kernel lets go of it when the
// process dies, however it dies.
type lock struct {
	file *os.File
}

// takeLock takes the lock of the folder, which must exist, and writes the
// process's id into it. It returns a *LockedError if another process has it.
func takeLock(ctx context.Context, folder string) (*lock, error) {
	path := filepath.Join(folder, lockFile)
	f, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE, 0o600)
	if err != nil {
		return nil, fmt.Errorf("opening the lock: %w", err)
	}
	for try := 1; ; try++ {
		err = unix.Flock(int(f.Fd()), unix.LOCK_EX|unix.LOCK_NB)
		if err == nil {
			break
		}
		held := errors.Is(err, unix.EWOULDBLOCK)
		if held && try < lockTries {
			if err = pause(ctx, lockPause); err == nil {
				continue
			}
		} else if held {
			err = &LockedError{Folder: folder, PID: holder(f)}
		} else if !errors.Is(err, unix.EINTR) {
			err = fmt.Errorf("locking %s: %w", path, err)
		} else {
			continue
		}
		return nil, errors.Join(err, f.Close())
	}
	l := &lock{file: f}
	if err := l.sign(); err != nil {
		return nil, errors.Join(fmt.Errorf("writing %s: %w", path, err), l.release())
	}
	return l, nil
}

// sign replaces the lock's content by the id of this process.
func (l *lock) sign() error {
	if err := l.file.Truncate(0); err != nil {
		return err
	}
	_, err := l.file.WriteAt([]byte(strconv.Itoa(os.Getpid())+"\n"), 0)
	return err
}

// release lets go of the lock. The file stays: removing it would let two
// processes lock two files of the same name.
func (l *lock) release() error {
	return errors.Join(l.file.Truncate(0), l.file.Close())
}

// holder reads the process id out of a lock, 0 if there is none.
func holder(f *os.File) int {
	text, err := io.ReadAll(io.NewSectionReader(f, 0, 32))
	if err != nil {
		return 0
	}
	pid, err := strconv.Atoi(strings.TrimSpace(string(text)))
	if err != nil {
		return 0
	}
	return pid
}

// locked reports whether a process holds the lock of the folder, and its id if
// it is known. It takes a shared lock for a moment to find out.
func locked(folder string) (held bool, pid int, err error) {
	f, err := os.Open(filepath.Join(folder, lockFile))
	if errors.Is(err, os.ErrNotExist) {
		return false, 0, nil
	}
	if err != nil {
		return false, 0, fmt.Errorf("opening the lock: %w", err)
	}
	err = unix.Flock(int(f.Fd()), unix.LOCK_SH|unix.LOCK_NB)
	switch {
	case errors.Is(err, unix.EWOULDBLOCK):
		return true, holder(f), f.Close()
	case err != nil:
		return false, 0, errors.Join(fmt.Errorf("probing the lock of %s: %w", folder, err), f.Close())
	}
	return false, 0, f.Close()
}

// pause waits for d, or returns the context's error if that ends first.
func pause(ctx context.Context, d time.Duration) error {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}
