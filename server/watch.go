package server

import (
	"context"
	"fmt"
	"strings"
	"time"

	"google.golang.org/grpc"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

const (
	watchInterval = 100 * time.Millisecond // so at most ten changes a second
	watchStall    = 30 * time.Second       // then a client that takes nothing is cut
)

// watch follows the beliefs of quantities whose IDs begin with prefix. It looks
// at what changed at intervals, rather than being told of each change: so
// changes conflate by themselves, and a client that takes its time holds up
// nobody and collects nothing.
type watch struct {
	service *beliefService
	prefix  string
	change  uint64                   // of the keeper, when last looked
	seen    map[*engine.Track]uint64 // View.Change of what was sent
	stall   time.Duration
}

func (s *beliefService) newWatch(prefix string) *watch {
	return &watch{service: s, prefix: prefix, seen: map[*engine.Track]uint64{}, stall: watchStall}
}

// run sends the present beliefs and then what changes, until ctx ends, send
// fails or the service stops. idle, if not nil, is called when nothing changed.
func (w *watch) run(ctx context.Context, send func(*leadlinev1.WatchBeliefsResponse) error, idle func() error) error {
	if err := w.round(send); err != nil {
		return err
	}
	ticker := time.NewTicker(watchInterval)
	defer ticker.Stop()
	for {
		select {
		case <-ticker.C:
		case <-ctx.Done():
			return ctx.Err()
		case <-w.service.stopping:
			return errStreamStopping
		}
		if idle != nil {
			if err := idle(); err != nil {
				return err
			}
		}
		if w.service.keeper.Change() == w.change {
			continue
		}
		if err := w.round(send); err != nil {
			return err
		}
	}
}

// round sends what changed since the one before.
func (w *watch) round(send func(*leadlinev1.WatchBeliefsResponse) error) error {
	w.change = w.service.keeper.Change() // before the views, so that none is missed
	for _, track := range w.service.keeper.Tracks() {
		view := track.View()
		if view == nil || !strings.HasPrefix(string(track.ID()), w.prefix) || w.seen[track] == view.Change {
			continue
		}
		_, known := w.seen[track]
		w.seen[track] = view.Change
		event, err := w.event(view, known)
		if err != nil {
			return err
		}
		if event == nil {
			continue
		}
		if err := send(event); err != nil {
			return err
		}
	}
	return nil
}

// event tells of a view; nil where there is nothing to tell.
func (w *watch) event(view *engine.View, known bool) (*leadlinev1.WatchBeliefsResponse, error) {
	if view.Quantity.Retired {
		if !known {
			return nil, nil
		}
		retired := &leadlinev1.WatchBeliefsResponse_RetiredQuantity{RetiredQuantity: string(view.Quantity.ID)}
		return &leadlinev1.WatchBeliefsResponse{Event: retired}, nil
	}
	belief, err := w.service.keeper.BeliefOf(view, engine.BeliefQuery{Now: engine.InstantOf(w.service.now())})
	if err != nil {
		return nil, fmt.Errorf("evaluate %s for a watch: %w", view.Quantity.ID, err)
	}
	return &leadlinev1.WatchBeliefsResponse{Event: &leadlinev1.WatchBeliefsResponse_Belief{Belief: beliefMessage(&belief)}}, nil
}

func checkPrefix(prefix string) error {
	if len(prefix) > engine.MaxIDBytes {
		return refuse(engine.InvalidField, "prefix", fmt.Sprintf("prefix is longer than %d bytes, as no ID is; shorten it", engine.MaxIDBytes))
	}
	return nil
}

// WatchBeliefs streams beliefs over gRPC.
func (s *beliefService) WatchBeliefs(r *leadlinev1.WatchBeliefsRequest, stream grpc.ServerStreamingServer[leadlinev1.WatchBeliefsResponse]) error {
	if err := checkPrefix(r.GetPrefix()); err != nil {
		return err
	}
	w := s.newWatch(r.GetPrefix())
	return sendWithin(w.stall, stream.Send, func(send func(*leadlinev1.WatchBeliefsResponse) error) error {
		return w.run(stream.Context(), send, nil)
	})
}

// sendWithin runs body with a send that gives up on a client which takes
// nothing for the given time. gRPC's own Send has no deadline, so it runs in a
// goroutine of its own, which ends at the latest when the handler has returned.
func sendWithin[M any](limit time.Duration, send func(M) error, body func(send func(M) error) error) error {
	messages, sent := make(chan M), make(chan error, 1)
	defer close(messages)
	go func() {
		for m := range messages {
			sent <- recovered(func() error { return send(m) })
		}
	}()
	timer := time.NewTimer(limit)
	defer timer.Stop()
	return body(func(m M) error {
		timer.Reset(limit)
		messages <- m
		select {
		case err := <-sent:
			return err
		case <-timer.C:
			return refuse(engine.Overloaded, "", fmt.Sprintf("the client took nothing for %v and was cut; watch again and read faster", limit))
		}
	})
}
