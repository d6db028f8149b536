package persist

import (
	"crypto/sha256"
	"errors"
	"fmt"
	"os"
	"sync"
	"sync/atomic"
	"time"

	bolt "go.etcd.io/bbolt"

	"leadline.example/engine"
)

// Errors to ask for with errors.Is, besides engine.ErrDiskFull and
// engine.ErrStorageFailed.
var (
	// ErrHeld: another process has the ledger open.
	ErrHeld = errors.New("the ledger is held by another process; stop that one or give another data directory")
	// ErrDamaged: the file isn't what was written.
	ErrDamaged = errors.New("the ledger is damaged; keep the file and restore a backup, `leadline verify` names what is lost")
	// ErrForeign: the file was never a ledger.
	ErrForeign = errors.New("the file is no ledger of this service; give another data directory")
	// ErrNewer: the file needs a newer program.
	ErrNewer = errors.New("the ledger was written by a newer version of the program; use that one")
	// ErrClosed: the handle is closed.
	ErrClosed = errors.New("the ledger is closed")
)

// FileName is the usual name of the file in a data directory.
const FileName = "leadline.db"

// mapBytes is the address space reserved for the file, so that it need not be
// mapped anew as it grows: that would wait for the readers, and only a file
// within it can be guarded, see Ledger.guard. It costs no memory.
const mapBytes = 64 << 30

// Options configures a Ledger.
type Options struct {
	// Path is the file; it is created if there is none, its directory isn't.
	Path string
	// Now stamps commit times; nil means time.Now.
	Now func() time.Time
	// MaxSize bounds the file in bytes; an Append beyond it fails as if the
	// disk were full. 0 means no bound. The file grows by steps of 16 MiB.
	MaxSize int64
	// OnCommit is told of each commit: how long it took, how many records it
	// had, and the bytes of ledger and checkpoint. It is called before Append
	// returns and must not block.
	OnCommit func(took time.Duration, records, ledgerBytes, checkpointBytes int)
	// OnSalvage is told of the copy made after a failure, see Ledger.Salvage.
	OnSalvage func(path string, err error)

	mapBytes int // in place of the constant
}

func (o *Options) validate() error {
	if o.Path == "" {
		return errors.New("persist: Options.Path is empty; give the file of the ledger")
	}
	if o.MaxSize < 0 {
		return fmt.Errorf("persist: Options.MaxSize is %d; give a number of bytes, or 0 for no bound", o.MaxSize)
	}
	if o.Now == nil {
		o.Now = time.Now
	}
	if o.OnCommit == nil {
		o.OnCommit = func(time.Duration, int, int, int) {}
	}
	if o.OnSalvage == nil {
		o.OnSalvage = func(string, error) {}
	}
	if o.mapBytes == 0 {
		o.mapBytes = mapBytes
	}
	return nil
}

// Ledger is an engine.Ledger in one bbolt file. Once an Append has failed the
// handle writes no more; reads go on and show what was acknowledged.
type Ledger struct {
	options Options
	db      *bolt.DB
	file    *os.File // the one db has open
	mapped  int64    // bytes that need no remapping

	mu      sync.Mutex // guards all below; held for a whole Append
	encoder *encoder
	values  []byte // encoded checkpoint of the group being appended
	// instruments has the latest record of each in the group being appended.
	instruments map[engine.InstrumentNumber]engine.Position
	failure     error // of an earlier Append
	closed      bool
	stuck       bool // a panic left db's locks held
	stale       bool // rows of an incomplete sweep are still to be deleted

	frozenMu sync.Mutex // guards frozen; taken after mu if both
	frozen   *bolt.Tx   // the state before a failed commit

	acknowledged atomic.Pointer[head]

	salvage    sync.Once
	salvaged   string
	salvageErr error
	salvaging  sync.WaitGroup
}

var _ engine.Ledger = (*Ledger)(nil)

// head is the durable end of the ledger; immutable.
type head struct {
	position    engine.Position
	commit      engine.Instant
	hash        [sha256.Size]byte
	swept       bool
	segment     uint32                  // of the last complete sweep
	through     engine.Position         // likewise
	instruments engine.InstrumentNumber // the last one recorded
	format      uint32                  // of the file; it stands under formatKey, not in the head
}

// complete tells whether the sweep of a segment is durable.
func (h *head) complete(segment uint32) bool { return h.swept && segment <= h.segment }

// Open opens the ledger, or creates it, and verifies what lies after the last
// sweep; Verify examines the whole. A damaged, foreign or newer file is left
// as it is.
func Open(o Options) (*Ledger, error) {
	if err := o.validate(); err != nil {
		return nil, err
	}
	if err := ensure(o.Path); err != nil {
		return nil, fmt.Errorf("open %s: %w", o.Path, err)
	}
	l := &Ledger{options: o, encoder: newEncoder(), instruments: map[engine.InstrumentNumber]engine.Position{}}
	if err := l.open(); err != nil {
		l.release()
		return nil, fmt.Errorf("open %s: %w", o.Path, err)
	}
	return l, nil
}

func (l *Ledger) open() error {
	var err error
	if l.db, l.file, err = openFile(l.options.Path, bolt.Options{
		MaxSize:         int(l.options.MaxSize),
		InitialMmapSize: l.options.mapBytes,
		NoSync:          noSync,
	}); err != nil {
		return err
	}
	m, err := readMetas(l.file, l.db.Info().PageSize)
	if err != nil {
		return err
	}
	if err := checkBranches(l.file, m); err != nil {
		return err
	}
	if err := l.recover(); err != nil {
		return err
	}
	return settleDirectory(l.options.Path, l.file)
}

// recover finds out where the ledger ends.
func (l *Ledger) recover() error {
	return l.view(func(tx *bolt.Tx) error {
		if err := checkFormat(tx); err != nil {
			return err
		}
		l.mapped = max(int64(l.options.mapBytes), tx.Size())
		l.db.NoFreelistSync = false // see openFile
		h, err := verifyTail(tx)
		if err != nil {
			return err
		}
		h.format = formatOf(tx.Bucket(metaBucket).Get(formatKey))
		l.acknowledged.Store(h)
		l.stale = hasStale(tx, h)
		return nil
	})
}

// Stats is a summary of the ledger.
type Stats struct {
	Bytes      int64 // of the file, free pages included
	FreePages  int   // pages of it that wait for use
	Position   engine.Position
	CommitTime engine.Instant    // of the last group
	Hash       [sha256.Size]byte // of the last group, and so of the whole ledger
	Through    engine.Position   // of the last complete sweep
}

// Stats returns a summary.
func (l *Ledger) Stats() Stats {
	h := l.acknowledged.Load()
	s := Stats{Position: h.position, CommitTime: h.commit, Hash: h.hash, Through: h.through}
	if info, err := l.file.Stat(); err == nil { // else it is closed: 0
		s.Bytes = info.Size()
	}
	b := l.db.Stats()
	s.FreePages = b.FreePageN + b.PendingPageN
	return s
}

// Close waits for a salvage under way and releases the file. It writes nothing.
func (l *Ledger) Close() error {
	l.mu.Lock()
	if l.closed {
		l.mu.Unlock()
		return nil
	}
	l.closed = true
	l.mu.Unlock()
	l.salvaging.Wait()
	return l.release()
}

// release frees what is open, also after an Open that failed half-way.
func (l *Ledger) release() error {
	l.frozenMu.Lock()
	if l.frozen != nil {
		l.frozen.Rollback()
		l.frozen = nil
	}
	l.frozenMu.Unlock()
	if l.db != nil && !l.stuck {
		return l.db.Close()
	}
	return abandon(l.file)
}
