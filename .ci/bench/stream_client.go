package main

import (
	"context"
	"fmt"
	"time"

	"golang.org/x/sync/errgroup"
	"google.golang.org/grpc"
	"google.golang.org/grpc/mem"
	"google.golang.org/protobuf/encoding/protowire"
)

const (
	perMessage     = 1_000
	streams        = 4
	unacknowledged = 16
)

// streamLoad is a few gateways that stream to one server, each over its own
// connection. They write messages straight from their feeds and read the counts
// of the answers, as a lean gateway would; so that it is the server that is
// measured, though the gateways run on the same cores.
type streamLoad struct {
	conns []*grpc.ClientConn
	feeds []*feed
}

func newStreamLoad(address, label string, total int) (*streamLoad, error) {
	l := &streamLoad{feeds: newFeeds(label, total, streams)}
	for range streams {
		conn, err := dial(address)
		if err != nil {
			return nil, err
		}
		l.conns = append(l.conns, conn)
	}
	return l, nil
}

func (l *streamLoad) close() {
	for _, c := range l.conns {
		c.Close()
	}
}

// run streams for that long and until everything is acknowledged.
func (l *streamLoad) run(d time.Duration) (int, error) {
	until := time.Now().Add(d)
	return l.runWhile(func(int) bool { return time.Now().Before(until) })
}

// runCount streams that many readings about.
func (l *streamLoad) runCount(readings int) (int, error) {
	messages := (readings + perMessage*streams - 1) / (perMessage * streams)
	return l.runWhile(func(sent int) bool { return sent < messages })
}

func (l *streamLoad) runWhile(more func(sent int) bool) (int, error) {
	counts := make([]int, streams)
	group, ctx := errgroup.WithContext(context.Background())
	for i := range streams {
		l.feeds[i].catchUp()
		group.Go(func() (err error) {
			counts[i], err = streamFeed(ctx, l.conns[i], l.feeds[i], more)
			return err
		})
	}
	err := group.Wait()
	total := 0
	for _, n := range counts {
		total += n
	}
	return total, err
}

// streamFeed streams one feed and returns how many readings were applied.
func streamFeed(ctx context.Context, conn *grpc.ClientConn, f *feed, more func(int) bool) (applied int, err error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	description := &grpc.StreamDesc{ClientStreams: true, ServerStreams: true}
	stream, err := conn.NewStream(ctx, description, "/leadline.v1.ReadingService/StreamReadings", grpc.ForceCodecV2(leanCodec{}))
	if err != nil {
		return 0, err
	}
	slots := make(chan struct{}, unacknowledged)
	sent := make(chan error, 1)
	go func() {
		n := 0
		for ; more(n); n++ {
			select {
			case slots <- struct{}{}:
			case <-ctx.Done():
				sent <- ctx.Err()
				return
			}
			if err := stream.SendMsg(&outgoing{feed: f, sequence: uint64(n + 1)}); err != nil {
				break // the receiver learns why
			}
		}
		sent <- stream.CloseSend()
	}()
	for {
		var a answer
		err := stream.RecvMsg(&a)
		if err != nil && err.Error() == "EOF" {
			return applied, <-sent
		}
		if err != nil {
			return applied, err
		}
		if a.applied != perMessage {
			return applied, fmt.Errorf("message %d: %d of %d readings were applied", a.sequence, a.applied, perMessage)
		}
		applied += int(a.applied)
		<-slots
	}
}

// outgoing is a StreamReadingsRequest yet to be made, answer what counts of a
// StreamReadingsResponse.
type outgoing struct {
	feed     *feed
	sequence uint64
}

type answer struct {
	sequence, applied uint64
	bytes             int
}

// leanCodec encodes and decodes these two.
type leanCodec struct{}

func (leanCodec) Name() string { return "proto" }

func (leanCodec) Marshal(v any) (mem.BufferSlice, error) {
	m, ok := v.(*outgoing)
	if !ok {
		return nil, fmt.Errorf("%T is not for sending", v)
	}
	pool := mem.DefaultBufferPool()
	buffer := pool.Get(128 * perMessage)
	b := protowire.AppendTag((*buffer)[:0], 1, protowire.VarintType)
	b = protowire.AppendVarint(b, m.sequence)
	for range perMessage {
		b = m.feed.appendProto(b, 2)
	}
	*buffer = b
	return mem.BufferSlice{mem.NewBuffer(buffer, pool)}, nil
}

func (leanCodec) Unmarshal(data mem.BufferSlice, v any) error {
	a, ok := v.(*answer)
	if !ok {
		return fmt.Errorf("%T is not for receiving", v)
	}
	buffer := data.MaterializeToBuffer(mem.DefaultBufferPool())
	defer buffer.Free()
	b := buffer.ReadOnlyData()
	a.bytes = len(b)
	for len(b) > 0 {
		number, wire, n := protowire.ConsumeTag(b)
		if n < 0 {
			return protowire.ParseError(n)
		}
		b = b[n:]
		if wire == protowire.VarintType {
			value, _ := protowire.ConsumeVarint(b)
			switch number {
			case 1:
				a.sequence = value
			case 3:
				a.applied = value
			}
		}
		if n = protowire.ConsumeFieldValue(number, wire, b); n < 0 {
			return protowire.ParseError(n)
		}
		b = b[n:]
	}
	return nil
}
