package server

import (
	"errors"
	"net/http"
	"slices"
	"sync"
	"time"
)

const (
	// partBytes is how much of a page is handed over at once: small enough for
	// a slow but honest client to take in time, large enough to cost little.
	partBytes = 64 << 10
	// stallTime is how long a client may make no progress while others wait.
	stallTime = 200 * time.Millisecond
)

// senders are the pages on their way to clients. When all slots are taken the
// client that has made no progress for the longest is cut, so that some who
// stop reading can't keep the others from the page; while there is room they
// have until their deadline.
type senders struct {
	mu  sync.Mutex // guards the list, and progress and cut of each sender
	all []*sender
}

// sender writes a page to one client. Each part has a deadline of its own, and
// all together that of an answer.
type sender struct {
	http.ResponseWriter
	of       *senders
	control  *http.ResponseController
	limit    time.Duration
	last     time.Time // when the whole page has to be sent
	progress time.Time
	cut      bool
	since    int // bytes since progress was noted
}

var errCut = errors.New("the client stopped reading while others waited for the page")

// begin adds a client.
func (s *senders) begin(w http.ResponseWriter, limit time.Duration) *sender {
	now := time.Now()
	x := &sender{
		ResponseWriter: w, of: s, control: http.NewResponseController(w),
		limit: limit, last: now.Add(max(limit, answerTime)), progress: now,
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	s.all = append(s.all, x)
	return x
}

// end removes a client; the next request on its connection has deadlines of its
// own.
func (s *senders) end(x *sender) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.all = slices.DeleteFunc(s.all, func(y *sender) bool { return y == x })
	if !x.cut {
		_ = x.control.SetWriteDeadline(time.Time{})
	}
}

// cutOne cuts the client without progress for the longest, if that is too long,
// and returns after how long to look again.
func (s *senders) cutOne() time.Duration {
	now := time.Now()
	s.mu.Lock()
	defer s.mu.Unlock()
	var slowest *sender
	for _, x := range s.all {
		if !x.cut && (slowest == nil || x.progress.Before(slowest.progress)) {
			slowest = x
		}
	}
	if slowest == nil {
		return stallTime
	}
	if since := now.Sub(slowest.progress); since < stallTime {
		return stallTime - since
	}
	slowest.cut = true
	_ = slowest.control.SetWriteDeadline(now) // writers without deadlines are cut at their next part
	return stallTime
}

// Write hands over the next bytes part by part.
func (x *sender) Write(p []byte) (int, error) {
	written := 0
	for written < len(p) {
		// Compression writes some hundred bytes at a time.
		if x.since == 0 || x.since >= partBytes/4 {
			if err := x.advance(); err != nil {
				return written, err
			}
		}
		n, err := x.ResponseWriter.Write(p[written:min(len(p), written+partBytes)])
		written += n
		x.since += n
		if err != nil {
			return written, x.reason(err)
		}
	}
	return written, nil
}

// flush sends what is still buffered.
func (x *sender) flush() error {
	if err := x.advance(); err != nil {
		return err
	}
	if err := x.control.Flush(); err != nil && !errors.Is(err, errors.ErrUnsupported) {
		return x.reason(err)
	}
	return nil
}

// advance takes note of progress and sets the deadline of the next part.
func (x *sender) advance() error {
	now := time.Now()
	x.of.mu.Lock()
	defer x.of.mu.Unlock()
	if x.cut {
		return errCut
	}
	x.progress, x.since = now, 0
	deadline := now.Add(x.limit)
	if deadline.After(x.last) {
		deadline = x.last
	}
	_ = x.control.SetWriteDeadline(deadline) // recorders and such have none
	return nil
}

// reason says why a write failed.
func (x *sender) reason(err error) error {
	x.of.mu.Lock()
	defer x.of.mu.Unlock()
	if x.cut {
		return errCut
	}
	return err
}
