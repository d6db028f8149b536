package server

import (
	"context"
	"errors"
	"fmt"
	"io"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// maxUnacknowledged is how many batches of a stream may wait for their commit.
const maxUnacknowledged = 16

type readingsStream = grpc.BidiStreamingServer[leadlinev1.StreamReadingsRequest, leadlinev1.StreamReadingsResponse]

// inflight is a batch of a stream on its way through the keeper.
type inflight struct {
	sequence uint64
	done     chan outcomeOfBatch // holds one
}

type outcomeOfBatch struct {
	results []engine.Result
	err     error
}

// StreamReadings posts batches without waiting for each. One goroutine receives
// and submits, this one acknowledges in order; the channel between them holds
// what is unacknowledged, and so stops the receiver when it is full. When the
// service stops, what waits in the channel is still acknowledged; a batch that
// was just being received may be durable without that, so the client has to
// resend what was not acknowledged, with its IDs and times.
func (s *readingService) StreamReadings(stream readingsStream) error {
	ctx, cancel := context.WithCancel(stream.Context())
	defer cancel()
	// The batch being acknowledged is outside the channel, and the one that
	// waits to enter it too.
	waiting := make(chan *inflight, maxUnacknowledged-2)
	ended := make(chan error, 1)
	go func() {
		ended <- recovered(func() error { return s.receive(ctx, stream, waiting) })
		close(waiting)
	}()
	for batch := range s.untilStopping(waiting) {
		if err := acknowledge(ctx, stream, batch); err != nil {
			return err
		}
	}
	select {
	case err := <-ended:
		return err
	default: // the service stops while the client has more to send
		return errStreamStopping
	}
}

var errStreamStopping = status.Error(codes.Unavailable, "the service is stopping; open the stream again and send what was not acknowledged")

// untilStopping yields the batches of a channel until it is closed, or until the
// service stops and none waits.
func (s *readingService) untilStopping(waiting <-chan *inflight) func(yield func(*inflight) bool) {
	return func(yield func(*inflight) bool) {
		for {
			select {
			case batch, ok := <-waiting:
				if !ok || !yield(batch) {
					return
				}
				continue
			default:
			}
			select {
			case batch, ok := <-waiting:
				if !ok || !yield(batch) {
					return
				}
			case <-s.stopping:
				return
			}
		}
	}
}

// receive submits what the client sends until it has sent all; nil is the end of
// a complete stream.
func (s *readingService) receive(ctx context.Context, stream readingsStream, waiting chan<- *inflight) error {
	id, err := requestID(ctx)
	if err != nil {
		return err
	}
	for last, first := uint64(0), true; ; first = false {
		var message wireBatch
		err := stream.RecvMsg(&message)
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			return err
		}
		if message.err != nil {
			return message.err
		}
		if !first && message.sequence <= last {
			return refuse(engine.InvalidField, "sequence", fmt.Sprintf("sequence is %d after %d; number the batches of a stream upwards", message.sequence, last))
		}
		last = message.sequence
		batch, err := s.submit(&message, id)
		if err != nil {
			return err
		}
		select {
		case waiting <- batch:
		case <-ctx.Done():
			return ctx.Err()
		}
		select {
		case <-s.stopping:
			return errStreamStopping
		default:
		}
	}
}

func (s *readingService) submit(message *wireBatch, requestID string) (*inflight, error) {
	batch := &inflight{sequence: message.sequence, done: make(chan outcomeOfBatch, 1)}
	return batch, s.keeper.Submit(
		engine.Batch{Readings: message.readings, Receive: engine.InstantOf(s.now()), RequestID: requestID},
		func(results []engine.Result, err error) { batch.done <- outcomeOfBatch{results, err} },
	)
}

func acknowledge(ctx context.Context, stream readingsStream, batch *inflight) error {
	var outcome outcomeOfBatch
	select {
	case outcome = <-batch.done:
	case <-ctx.Done():
		return ctx.Err()
	}
	if outcome.err != nil {
		return outcome.err
	}
	return stream.SendMsg(&wireAnswer{batch.sequence, outcome.results})
}
