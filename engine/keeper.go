package engine

import (
	"cmp"
	"errors"
	"sync"
	"sync/atomic"
	"time"

	"leadline.example/engine/modelcheck"
)

// Options configures a Keeper.
type Options struct {
	// Open opens the ledger. It is called again, after the first was closed, to
	// resume after a full disk.
	Open func() (Ledger, error)
	// MaxClockSkew is how far a reading's time may lie after its receipt;
	// 0 means 5 minutes.
	MaxClockSkew time.Duration
	// DuplicateWindow is how many reading IDs are remembered, for 24 hours of
	// receipts; 0 means 1,000,000. An exact repeat is known for ever.
	DuplicateWindow int
	// RefusedLog is how many refused readings can be listed and put through;
	// 0 means 100,000.
	RefusedLog int
	// CheckpointRecords is how many records are written between the beginnings
	// of two checkpoints at least; 0 means 65,536, or sixteen for every quantity
	// if that is more. A start replays up to twice as many.
	CheckpointRecords int
	// OnFault is told of each fault of the storage; nil ignores them. It must
	// not call the Keeper.
	OnFault func(error)

	minGeneration int // in place of the constant
}

func (o *Options) validate() error {
	if o.Open == nil {
		return errors.New("engine: Options.Open is missing")
	}
	if o.MaxClockSkew < 0 || o.DuplicateWindow < 0 || o.RefusedLog < 0 || o.CheckpointRecords < 0 {
		return errors.New("engine: Options has a negative limit; give 0 for the default")
	}
	o.MaxClockSkew = cmp.Or(o.MaxClockSkew, skewDefault)
	o.DuplicateWindow = cmp.Or(o.DuplicateWindow, 1_000_000)
	o.minGeneration = cmp.Or(o.minGeneration, minGeneration)
	o.RefusedLog = cmp.Or(o.RefusedLog, 100_000)
	if o.OnFault == nil {
		o.OnFault = func(error) {}
	}
	return nil
}

// Bounds of one group and of what may wait.
const (
	maxGroupRecords   = 2_000
	maxGroupBytes     = 256 << 10
	maxQueuedCommands = 4_096
	maxQueuedReadings = 200_000
	refoldBudget      = 1_000 // steps that a group may spend on late readings
)

// Keeper owns all beliefs. One goroutine takes the commands that wait, decides
// on each, has the ledger commit the records as a group, folds them into the
// beliefs, publishes the new views and answers. While a group is being made
// durable the next one is decided on, so what waits batches itself and no
// timer is needed.
//
// Invariants: an answer follows the commit of every record it rests on; a
// View shows only durable records; state is changed by records alone, in
// their order, so that a replay of the ledger gives the same state.
type Keeper struct {
	options  Options
	seeds    idSeeds
	commands chan *command
	queued   atomic.Int64 // readings in commands
	stopping chan struct{}
	stopped  chan struct{}
	gate     sync.RWMutex // guards closed; held to put a command into the queue
	closed   bool         // nothing more is put into the queue
	once     sync.Once
	resumes  sync.Mutex // one Resume at a time
	closeErr error

	// Of the keeper's goroutine.
	ledger      Ledger
	byNumber    []*Track           // index number-1
	instruments []*instrumentTrack // likewise
	window      *window
	decidedTo   Position // last position given to a record
	change      uint64   // of the group being folded
	budget      int      // steps left for its late readings and new models
	touched     []*Track // by the group being folded
	fresh       uint64   // readings applied by it
	arrived     []*Track // declared for the first time by it
	partial     *command // a batch that goes on in the next group
	resuming    *command // waits for the group on its way
	jobs        []*job   // waiting for the rebuilder
	working     bool     // the rebuilder has a job
	sweep       sweeper
	laws        map[modelcheck.Settings]modelcheck.Law
	received    Instant  // when the latest record was
	due         []*Track // with steps to be recorded
	failed      error
	warmed      uint64 // no number of interest, see warm

	// Written by the keeper's goroutine, read by all.
	directory  atomic.Pointer[directory]
	tracks     atomic.Pointer[[]*Track] // sorted by ID
	refusals   refusals
	published  atomic.Uint64 // newest change
	position   atomic.Uint64
	trimmed    atomic.Uint64 // sweep.trimmed
	windowLost atomic.Uint64 // window.lost
	health     atomic.Pointer[error]
	current    atomic.Pointer[Ledger]
	counts

	// Between the keeper's goroutine, the committer, the rebuilder and the forecaster.
	commits     chan *Group
	committed   chan error
	jobQueue    chan *job
	jobDone     chan *job
	aheads      *aheadQueue   // to the forecaster
	budgeting   chan struct{} // holds the one long budget under way
	foretelling chan struct{} // likewise of forecasts
	workers     sync.WaitGroup
}

// New opens the ledger, brings every belief up to its end and starts the
// keeper.
func New(o Options) (*Keeper, error) {
	if err := o.validate(); err != nil {
		return nil, err
	}
	k := &Keeper{
		options:     o,
		seeds:       newIDSeeds(),
		commands:    make(chan *command, maxQueuedCommands),
		stopping:    make(chan struct{}),
		stopped:     make(chan struct{}),
		commits:     make(chan *Group),
		committed:   make(chan error),
		jobQueue:    make(chan *job),
		jobDone:     make(chan *job, 1),
		aheads:      newAheadQueue(),
		budgeting:   make(chan struct{}, 1),
		foretelling: make(chan struct{}, 1),
	}
	if err := k.load(); err != nil {
		return nil, err
	}
	k.workers.Go(k.commitLoop)
	k.workers.Go(k.rebuildLoop)
	k.workers.Go(k.foreseeLoop)
	go k.run()
	return k, nil
}

// Close refuses new requests, finishes those that wait, writes a complete
// checkpoint and closes the ledger. It may be called more than once.
func (k *Keeper) Close() error {
	k.once.Do(func() { close(k.stopping) })
	<-k.stopped
	return k.closeErr
}

// run is the keeper's goroutine.
func (k *Keeper) run() {
	defer close(k.stopped)
	next, flying, landed := new(work), new(work), new(work)
	for {
		if k.partial != nil && !next.full() {
			k.decide(next, k.partial)
		}
		if !flying.started && k.resuming != nil {
			k.resuming.err = k.resume()
			next.waiting = append(next.waiting, k.resuming)
			k.resuming = nil
		}
		if !flying.started && !next.empty() {
			flying, next = next, flying
			k.begin(flying)
			continue
		}
		if !flying.started {
			if !k.idle(next) {
				k.finish()
				return
			}
			continue
		}
		if err, done := k.await(next); done {
			// The next group sets out before this one is folded, so that the
			// disk has something to do meanwhile.
			landed, flying = flying, landed
			if err == nil && k.failed == nil && len(next.Records) > 0 {
				flying, next = next, flying
				k.begin(flying)
			}
			k.land(landed, err)
		}
	}
}

// work is a group in the making and the commands that it answers.
type work struct {
	Group
	bytes   int
	waiting []*command
	started bool
}

func (w *work) empty() bool { return len(w.Records) == 0 && len(w.waiting) == 0 }

func (w *work) full() bool {
	return len(w.Records) >= maxGroupRecords || w.bytes >= maxGroupBytes
}

func (w *work) reset() {
	clear(w.Records)
	clear(w.Checkpoint)
	clear(w.waiting)
	*w = work{Group: Group{Records: w.Records[:0], Checkpoint: w.Checkpoint[:0]}, waiting: w.waiting[:0]}
}

// recordBytes is what a record takes about, without its texts.
const recordBytes = 40

// next returns the place of one more record, whose texts have that many bytes.
func (w *work) next(texts int) *Record {
	w.bytes += recordBytes + texts
	w.Records = append(w.Records, Record{})
	return &w.Records[len(w.Records)-1]
}

// idle waits for something to do; false when the keeper is to stop and nothing
// waits.
func (k *Keeper) idle(next *work) bool {
	select {
	case c := <-k.commands:
		k.take(next, c)
		return true
	case j := <-k.jobDone:
		k.working = false
		k.finishJob(j)
		k.dispatch()
		return true
	case <-k.stopping:
		select {
		case c := <-k.commands:
			k.take(next, c)
			return true
		default:
			return false
		}
	}
}

// await waits until the group on its way is done, with an error or durable; or
// for a rebuild, or for more to do in next unless that is full.
func (k *Keeper) await(next *work) (err error, done bool) {
	commands := k.commands
	if next.full() || k.partial != nil || k.resuming != nil {
		commands = nil
	}
	select {
	case err := <-k.committed:
		return err, true
	case j := <-k.jobDone:
		k.working = false
		k.finishJob(j)
		k.dispatch()
	case c := <-commands:
		k.take(next, c)
	}
	return nil, false
}

// take decides on c and on whatever waits behind it until the group is full.
func (k *Keeper) take(w *work, c *command) {
	for {
		k.decide(w, c)
		if w.full() || k.partial != nil || k.resuming != nil {
			return
		}
		select {
		case c = <-k.commands:
		default:
			return
		}
	}
}

// begin sends a group on its way; one without records lands at once, being
// behind everything that its answers rest on.
func (k *Keeper) begin(w *work) {
	if len(w.Records) == 0 || k.failed != nil {
		k.land(w, nil)
		return
	}
	k.addCheckpoint(w)
	w.started = true
	k.commits <- &w.Group
}

// commitLoop is the committer's goroutine.
func (k *Keeper) commitLoop() {
	for g := range k.commits {
		k.committed <- k.ledger.Append(g)
	}
}

// land folds a durable group and answers its commands.
func (k *Keeper) land(w *work, err error) {
	if err != nil {
		k.fail(err)
	}
	if k.failed != nil {
		for _, c := range w.waiting {
			c.err = cmp.Or(c.err, k.failed)
		}
	} else {
		k.foldGroup(w.Records)
		k.landCheckpoint(w)
	}
	for _, c := range w.waiting {
		k.queued.Add(-int64(len(c.batch.Readings)))
		c.done()
	}
	w.reset()
}

// foldGroup folds records that are durable and publishes what they change.
func (k *Keeper) foldGroup(records []Record) {
	if len(records) == 0 {
		return
	}
	k.change++
	k.budget = refoldBudget
	k.warmed += k.warm(records)
	for i := range records {
		k.apply(&records[i])
	}
	k.settleTouched()
	k.dueSteps(k.touched)
	k.publish(records[len(records)-1].Position)
}

// finish ends the keeper: a complete checkpoint, then everything is closed.
func (k *Keeper) finish() {
	if k.failed == nil {
		if err := k.finalCheckpoint(); err != nil {
			k.fail(err)
		}
	}
	k.gate.Lock()
	k.closed = true
	k.gate.Unlock()
	close(k.commits)
	close(k.jobQueue)
	k.workers.Wait()
	k.closeErr = k.ledger.Close()
	for {
		select {
		case c := <-k.commands: // came while the keeper was stopping
			k.queued.Add(-int64(len(c.batch.Readings)))
			c.err = errStopping
			c.done()
		default:
			return
		}
	}
}

// fail takes note that a group could not be made durable: nothing further is
// decided or written, and views stay as they are.
func (k *Keeper) fail(err error) {
	if k.failed == nil {
		k.failed = err
		k.health.Store(&err)
		k.options.OnFault(err)
	}
}
