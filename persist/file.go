package persist

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime/debug"
	"syscall"
	"time"

	bolt "go.etcd.io/bbolt"
	berrors "go.etcd.io/bbolt/errors"
)

// Buckets of the file. doc.go draws their keys and values.
var (
	metaBucket       = []byte("meta")
	headBucket       = []byte("head")
	ledgerBucket     = []byte("ledger")
	quantitiesBucket = []byte("quantities")
	statesBucket     = []byte("states")
	segmentsBucket   = []byte("segments")
	// instrumentsBucket is made together with the first record of an instrument.
	instrumentsBucket = []byte("instruments")

	formatKey = []byte("format")
	sweepKey  = []byte("sweep")
	headKey   = []byte("head")
)

// buckets lists those that every file has.
func buckets() [][]byte {
	return [][]byte{metaBucket, headBucket, ledgerBucket, quantitiesBucket, statesBucket, segmentsBucket}
}

// magic begins the value of formatKey; the version follows in four bytes.
const magic = "leadline ledger\x00"

// lockWait is how long Open waits for another process to let go of the file.
const lockWait = time.Second

// ensure creates the file if there is none: under another name, synced, and
// then linked to its own, so that a power loss leaves either no ledger or a
// whole one, and no ledger of another process is overwritten. Another process
// that creates the file meanwhile may take the unfinished one for a leftover.
// The new name is durable only once the directory is synced.
func ensure(path string) error {
	info, err := os.Stat(path)
	if err == nil && info.Size() == 0 {
		return fmt.Errorf("%w: the file is empty", ErrDamaged)
	}
	if !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	temporary, err := createTemporary(path)
	if err == nil {
		err = errors.Join(os.Link(temporary, path), os.Remove(temporary))
	}
	if err == nil {
		return nil
	}
	if _, absent := os.Stat(path); absent != nil {
		return err
	}
	return nil
}

// createTemporary writes an empty ledger beside path and returns its name.
func createTemporary(path string) (string, error) {
	f, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+temporarySuffix)
	if err != nil {
		return "", err
	}
	name := f.Name()
	if err := f.Close(); err != nil {
		return "", err
	}
	if err := format(name); err != nil {
		return "", errors.Join(err, os.Remove(name))
	}
	return name, nil
}

// format makes an empty file an empty ledger.
func format(path string) error {
	db, err := bolt.Open(path, 0o600, &bolt.Options{FreelistType: bolt.FreelistMapType, NoSync: noSync})
	if err != nil {
		return err
	}
	err = db.Update(func(tx *bolt.Tx) error {
		for _, name := range buckets() {
			if _, err := tx.CreateBucket(name); err != nil {
				return err
			}
		}
		return putFormat(tx, formatFirst)
	})
	return errors.Join(err, db.Close())
}

// openFile opens the bbolt file, which must exist. bbolt can panic on a damaged
// one. NoFreelistSync is set for as long as the file may be a foreign one: else
// bbolt would write a freelist into it.
func openFile(path string, o bolt.Options) (db *bolt.DB, file *os.File, err error) {
	o.Timeout = lockWait
	o.FreelistType = bolt.FreelistMapType
	o.NoFreelistSync = true
	o.OpenFile = func(name string, flag int, mode os.FileMode) (*os.File, error) {
		var err error
		file, err = os.OpenFile(name, flag&^os.O_CREATE, mode)
		return file, err
	}
	err = guarded(func() error {
		db, err = bolt.Open(path, 0o600, &o)
		return err
	})
	switch {
	case errors.Is(err, berrors.ErrTimeout):
		err = ErrHeld
	case errors.Is(err, berrors.ErrInvalid), errors.Is(err, berrors.ErrVersionMismatch):
		err = ErrForeign
	case errors.Is(err, berrors.ErrChecksum):
		err = fmt.Errorf("%w: both meta pages fail their checksum", ErrDamaged)
	}
	if errors.Is(err, ErrDamaged) {
		abandon(file) // which bbolt hasn't after a panic
	}
	if err != nil {
		return nil, nil, err
	}
	return db, file, nil
}

// abandon gives up a file that bbolt can't close any more. The mapping stays,
// and would hold the lock.
func abandon(file *os.File) error {
	if file == nil {
		return nil
	}
	return errors.Join(syscall.Flock(int(file.Fd()), syscall.LOCK_UN), file.Close())
}

// checkFormat tells whether the file is a ledger that this version reads.
func checkFormat(tx *bolt.Tx) error {
	if info := tx.Bucket(metaBucket); info == nil {
		return ErrForeign
	}
	if err := checkFormatValue(tx.Bucket(metaBucket).Get(formatKey)); err != nil {
		return err
	}
	for _, name := range buckets() {
		if tx.Bucket(name) == nil {
			return fmt.Errorf("%w: the bucket %s is missing", ErrDamaged, name)
		}
	}
	return nil
}

func checkFormatValue(v []byte) error {
	if len(v) != len(magic)+4 || string(v[:len(magic)]) != magic {
		return ErrForeign
	}
	if version := formatOf(v); version > formatThird {
		return fmt.Errorf("%w: its format is %d, this program's %d", ErrNewer, version, formatThird)
	}
	return nil
}

// guarded calls fn and turns a panic, or a fault from touching a page that
// isn't there, into ErrDamaged. fn must be our own reading of the file and call
// nothing of the callers'.
func guarded(fn func() error) (err error) {
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("%w: reading a page: %v", ErrDamaged, p)
		}
	}()
	return fn()
}

// view calls fn with a read transaction of what is durable, guarded.
func (l *Ledger) view(fn func(*bolt.Tx) error) error {
	l.frozenMu.Lock()
	if l.frozen != nil {
		defer l.frozenMu.Unlock()
		return guarded(func() error { return fn(l.frozen) })
	}
	l.frozenMu.Unlock()
	return guarded(func() error {
		tx, err := l.db.Begin(false)
		if errors.Is(err, berrors.ErrDatabaseNotOpen) {
			return ErrClosed
		}
		if err != nil {
			return err
		}
		defer tx.Rollback()
		return fn(tx)
	})
}
