package server_test

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"net/http"
	"strings"

	"google.golang.org/protobuf/encoding/protojson"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// watch opens a watch by either protocol and returns how to receive from it.
func (r *running) watch(ctx context.Context, protocol, prefix string) func() (*leadlinev1.WatchBeliefsResponse, error) {
	r.t.Helper()
	if protocol == "gRPC" {
		stream, err := r.beliefs.WatchBeliefs(ctx, &leadlinev1.WatchBeliefsRequest{Prefix: prefix})
		if err != nil {
			r.t.Fatal(err)
		}
		return stream.Recv
	}
	request, err := http.NewRequestWithContext(ctx, "GET", r.url+"/v1/beliefs:watch?prefix="+prefix, nil)
	if err != nil {
		r.t.Fatal(err)
	}
	request.Header.Set("Accept", "text/event-stream")
	response, err := http.DefaultClient.Do(request)
	if err != nil {
		r.t.Fatal(err)
	}
	r.t.Cleanup(func() { _ = response.Body.Close() })
	if got := response.Header.Get("Content-Type"); response.StatusCode != 200 || got != "text/event-stream" {
		r.t.Fatalf("status %d, %s", response.StatusCode, got)
	}
	lines := bufio.NewScanner(response.Body)
	return func() (*leadlinev1.WatchBeliefsResponse, error) { return receiveEvent(lines) }
}

// receiveEvent reads one server-sent event and checks its type against its data.
func receiveEvent(lines *bufio.Scanner) (*leadlinev1.WatchBeliefsResponse, error) {
	kind, event := "", (*leadlinev1.WatchBeliefsResponse)(nil)
	for lines.Scan() {
		name, value, _ := strings.Cut(lines.Text(), ": ")
		switch name {
		case "event":
			kind = value
		case "data":
			if kind == "error" {
				return nil, errors.New(value)
			}
			event = new(leadlinev1.WatchBeliefsResponse)
			if err := protojson.Unmarshal([]byte(value), event); err != nil {
				return nil, err
			}
		}
		if lines.Text() != "" || event == nil {
			continue
		}
		if (kind == "belief") != (event.GetBelief() != nil) || (kind == "retired") != (event.GetRetiredQuantity() != "") {
			return nil, fmt.Errorf("event %q with %v", kind, event)
		}
		return event, nil
	}
	return nil, fmt.Errorf("the stream ended: %w", lines.Err())
}
