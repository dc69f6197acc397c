package gate

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"time"

	"golang.org/x/sys/unix"
)

// Book is the file of users. Its zero path is no file.
type Book struct{ Path string }

// bookFormat is the number of the file's format.
const bookFormat = 1

// maxBook bounds how much of the file is read.
const maxBook = 16 << 20

// bookFile is the file as written.
type bookFile struct {
	Format int        `json:"format"`
	Users  []bookUser `json:"users"`
}

type bookUser struct {
	Name    string     `json:"name"`
	Role    string     `json:"role"`
	Token   string     `json:"token_sha256,omitempty"`
	Added   time.Time  `json:"added"`
	Revoked *time.Time `json:"revoked,omitempty"`
}

// ErrNoUser is that there is no such user, or none that may sign in.
var ErrNoUser = errors.New("no such user")

// Users reads the file: everybody in it, in the order in which they came. No
// file is no users. One that others can read or write is refused, and so is
// one of a newer program.
func (b Book) Users() (users []User, err error) {
	f, err := os.Open(b.Path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, fmt.Errorf("the file of users: %w", err)
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	info, err := f.Stat()
	if err != nil {
		return nil, fmt.Errorf("the file of users: %w", err)
	}
	if mode := info.Mode(); !mode.IsRegular() || mode.Perm()&0o077 != 0 {
		return nil, fmt.Errorf("the file of users %s is %v: it must be a plain file that its owner alone can read: chmod 600 %s", b.Path, mode, b.Path)
	}
	data, err := io.ReadAll(io.LimitReader(f, maxBook))
	if err != nil {
		return nil, fmt.Errorf("the file of users: %w", err)
	}
	users, err = parseBook(data)
	if err != nil {
		return nil, fmt.Errorf("the file of users %s: %w", b.Path, err)
	}
	return users, nil
}

// parseBook reads the text of the file. No error repeats what stands there.
func parseBook(data []byte) ([]User, error) {
	var file bookFile
	d := json.NewDecoder(bytes.NewReader(data))
	d.DisallowUnknownFields()
	if err := d.Decode(&file); err != nil {
		return nil, fmt.Errorf("can't be read: %w", err)
	}
	if file.Format != bookFormat {
		return nil, fmt.Errorf("has format %d, this program knows %d: use the program that wrote it", file.Format, bookFormat)
	}
	users := make([]User, len(file.Users))
	for i, in := range file.Users {
		u := User{Name: in.Name, Added: in.Added}
		if in.Revoked != nil {
			u.Revoked = *in.Revoked
		}
		var err error
		if u.Role, err = ParseRole(in.Role); err != nil {
			return nil, fmt.Errorf("user %d: %w", i+1, err)
		}
		if err = checkName(in.Name); err != nil {
			return nil, fmt.Errorf("user %d: %w", i+1, err)
		}
		if u.Active() {
			if u.digest, err = parseDigest(in.Token); err != nil {
				return nil, fmt.Errorf("user %d: token_sha256 %w", i+1, err)
			}
		}
		if _, twice := find(users[:i], u.Name); twice {
			return nil, fmt.Errorf("user %d has the name of another", i+1)
		}
		users[i] = u
	}
	return users, nil
}

// find returns the place of a user; names that differ in case are the same.
func find(users []User, name string) (int, bool) {
	for i := range users {
		if strings.EqualFold(users[i].Name, name) {
			return i, true
		}
	}
	return -1, false
}

// Add adds a user and returns the token to sign in with, which is kept nowhere.
// A user that was revoked comes back with a new one. random gives its bytes.
func (b Book) Add(name string, role Role, now time.Time, random io.Reader) (token string, err error) {
	if err := checkName(name); err != nil {
		return "", err
	}
	if token, err = newToken(random); err != nil {
		return "", err
	}
	fresh := User{Name: name, Role: role, Added: now.UTC().Truncate(time.Second), digest: digestOf(token)}
	err = b.change(func(users []User) ([]User, error) {
		i, found := find(users, name)
		switch {
		case !found:
			return append(users, fresh), nil
		case users[i].Active():
			return nil, fmt.Errorf("%s is a user already, with the role %s: revoke that one first to give another token or role", users[i].Name, users[i].Role)
		}
		users[i] = fresh
		return users, nil
	})
	if err != nil {
		return "", err
	}
	return token, nil
}

// Revoke takes a user's token back: it lets nobody in any more, and sessions
// that began with it end. The name stays in the file, since acts carry it. The
// error is an ErrNoUser if nobody of that name may sign in.
func (b Book) Revoke(name string, now time.Time) error {
	return b.change(func(users []User) ([]User, error) {
		i, found := find(users, name)
		if !found || !users[i].Active() {
			return nil, fmt.Errorf("%w: nobody called %q may sign in", ErrNoUser, name)
		}
		users[i].Revoked = now.UTC().Truncate(time.Second)
		return users, nil
	})
}

// change replaces the file by what a function makes of it, whole or not at
// all, while no other process changes it.
func (b Book) change(f func([]User) ([]User, error)) (err error) {
	if b.Path == "" {
		return errors.New("there is no file of users")
	}
	folder := filepath.Dir(b.Path)
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return fmt.Errorf("the folder of the file of users: %w", err)
	}
	lock, err := os.OpenFile(b.Path+".lock", os.O_RDWR|os.O_CREATE, 0o600)
	if err != nil {
		return fmt.Errorf("the lock of the file of users: %w", err)
	}
	defer func() { err = errors.Join(err, lock.Close()) }() // lets go of the lock
	if err := unix.Flock(int(lock.Fd()), unix.LOCK_EX); err != nil {
		return fmt.Errorf("locking the file of users: %w", err)
	}
	users, err := b.Users()
	if err != nil {
		return err
	}
	if users, err = f(users); err != nil {
		return err
	}
	data, err := encodeBook(users)
	if err != nil {
		return err
	}
	if err := replaceFile(b.Path, data); err != nil {
		return fmt.Errorf("writing the file of users: %w", err)
	}
	return nil
}

func encodeBook(users []User) ([]byte, error) {
	file := bookFile{Format: bookFormat, Users: make([]bookUser, len(users))}
	for i, u := range users {
		out := bookUser{Name: u.Name, Role: u.Role.String(), Added: u.Added}
		if u.Active() {
			out.Token = u.digest.String()
		} else {
			out.Revoked = &u.Revoked
		}
		file.Users[i] = out
	}
	data, err := json.MarshalIndent(file, "", "  ")
	return append(data, '\n'), err
}

// replaceFile puts a file that its owner alone can read in the place of
// another, synced.
func replaceFile(path string, data []byte) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), ".users-*") // mode 0600
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	_, err = f.Write(data)
	if err == nil {
		err = f.Sync()
	}
	if err = errors.Join(err, f.Close()); err != nil {
		return err
	}
	if err := os.Rename(f.Name(), path); err != nil {
		return err
	}
	return syncFolder(filepath.Dir(path))
}

func syncFolder(folder string) error {
	f, err := os.Open(folder)
	if err != nil {
		return err
	}
	return errors.Join(f.Sync(), f.Close())
}
