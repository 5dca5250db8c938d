package broker

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"github.com/nats-io/nkeys"
)

// identity is a user of the broker: its seed stays in its file, or in memory for the daemon's own.
type identity struct {
	file   string // "" for one that is kept in memory
	public string
	key    nkeys.KeyPair // nil for one that is kept in a file
}

// keep returns the identity of a seed file, which it makes if there is none. An existing one is
// never replaced: other people hold copies of it.
func keep(file string) (identity, error) {
	seed, err := os.ReadFile(file)
	if errors.Is(err, fs.ErrNotExist) {
		if seed, err = makeSeed(file); err != nil {
			return identity{}, err
		}
	} else if err != nil {
		return identity{}, err
	}
	defer clear(seed)
	info, err := os.Stat(file)
	if err != nil {
		return identity{}, err
	}
	if mode := info.Mode().Perm(); mode&0o007 != 0 {
		return identity{}, fmt.Errorf("%s: mode %04o lets everybody use it; want 0600 (if others may have read it, delete it and start again)", file, mode)
	}
	// The library's errors are not passed on: they could quote the seed.
	pair, err := nkeys.ParseDecoratedNKey(seed)
	if err != nil {
		return identity{}, fmt.Errorf("%s: holds no seed; want an nkey user seed (delete the file to have a new one made)", file)
	}
	defer pair.Wipe()
	public, err := pair.PublicKey()
	if err != nil || !nkeys.IsValidPublicUserKey(public) {
		return identity{}, fmt.Errorf("%s: holds another kind of seed; want an nkey user seed", file)
	}
	return identity{file: file, public: public}, nil
}

func makeSeed(file string) ([]byte, error) {
	pair, err := nkeys.CreateUser()
	if err != nil {
		return nil, err
	}
	seed, err := pair.Seed()
	if err != nil {
		return nil, err
	}
	return seed, write(file, append(bytes.Clone(seed), '\n'), 0o600)
}

// own makes the daemon's own identity, which lives as long as the process.
func own() (identity, error) {
	pair, err := nkeys.CreateUser()
	if err != nil {
		return identity{}, err
	}
	public, err := pair.PublicKey()
	return identity{public: public, key: pair}, err
}

// write makes a file appear whole or not at all.
func write(file string, text []byte, mode os.FileMode) error {
	temp, err := os.CreateTemp(filepath.Dir(file), "."+filepath.Base(file)+"-*")
	if err != nil {
		return err
	}
	defer os.Remove(temp.Name()) // fails once it is renamed
	_, err = temp.Write(text)
	if err == nil {
		err = temp.Chmod(mode)
	}
	if err == nil {
		err = temp.Sync()
	}
	if e := temp.Close(); err == nil {
		err = e
	}
	if err == nil {
		err = os.Rename(temp.Name(), file)
	}
	if err != nil {
		return fmt.Errorf("%s: %w", file, err)
	}
	return nil
}
