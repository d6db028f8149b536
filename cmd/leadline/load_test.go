package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// wireReading and wireResult are the JSON of readings and their results, as a
// client that knows nothing of the service's code writes and reads it.
type wireReading struct {
	Quantity  string  `json:"quantity,omitempty"`
	Value     float64 `json:"value"`
	Time      string  `json:"time"`
	ReadingID string  `json:"reading_id"`
	By        string  `json:"instrument,omitempty"`
	Occasion  string  `json:"occasion,omitempty"`
}

type wireResult struct {
	ReadingID string `json:"reading_id"`
	Status    string `json:"status"`
	Reason    string `json:"reason"`
	Detail    string `json:"detail"`
}

func (e entry) wire() wireReading {
	return wireReading{string(e.quantity), e.value, e.time.Time().Format(time.RFC3339Nano), string(e.id), string(e.by), e.occasion}
}

// call sends a request with a JSON body (nil: none) and decodes the answer,
// which must have status 200, into out.
func call(ctx context.Context, client *http.Client, method, url string, body, out any) error {
	encoded, err := json.Marshal(body)
	if err != nil {
		return err
	}
	if body == nil {
		encoded = nil
	}
	request, err := http.NewRequestWithContext(ctx, method, url, bytes.NewReader(encoded))
	if err != nil {
		return err
	}
	response, err := client.Do(request)
	if err != nil {
		return err
	}
	defer response.Body.Close()
	answer, err := io.ReadAll(response.Body)
	if err != nil {
		return err
	}
	if response.StatusCode == http.StatusServiceUnavailable && bytes.Contains(answer, []byte("the service is stopping")) {
		return fmt.Errorf("%s %s: %s", method, url, answer) // a graceful stop, nothing was taken
	}
	if response.StatusCode != http.StatusOK {
		return &wrongAnswer{fmt.Sprintf("%s %s answers %s: %s", method, url, response.Status, answer)}
	}
	return json.Unmarshal(answer, out)
}

// wrongAnswer is an answer that is wrong whether or not the process was about
// to be killed; any other error of a client is the kill's doing.
type wrongAnswer struct{ message string }

func (e *wrongAnswer) Error() string { return e.message }

// take notes the answers to fresh readings, which must all be applied.
func (j *journal) take(results []wireResult) error {
	for _, r := range results {
		if r.Status != "APPLIED" {
			return &wrongAnswer{fmt.Sprintf("fresh reading %s is %s %s %s, want APPLIED", r.ReadingID, r.Status, r.Reason, r.Detail)}
		}
		if err := j.answer(engine.ReadingID(r.ReadingID)); err != nil {
			return &wrongAnswer{err.Error()}
		}
	}
	return nil
}

// postSingles posts one reading a request until something fails.
func (j *journal) postSingles(ctx context.Context, client *http.Client, base string) error {
	for {
		e := j.next(1)[0]
		body := e.wire()
		body.Quantity = ""
		var answer struct{ Result wireResult }
		url := base + "/v1/quantities/" + string(e.quantity) + "/readings"
		if err := call(ctx, client, http.MethodPost, url, body, &answer); err != nil {
			return err
		}
		if err := j.take([]wireResult{answer.Result}); err != nil {
			return err
		}
	}
}

// postBatches posts batches of up to 100 readings until something fails.
func (j *journal) postBatches(ctx context.Context, client *http.Client, base string) error {
	for {
		results, err := postBatch(ctx, client, base, j.next(1+j.random.IntN(100)))
		if err != nil {
			return err
		}
		if err := j.take(results); err != nil {
			return err
		}
	}
}

// postBatch posts the entries as one batch and returns as many results.
func postBatch(ctx context.Context, client *http.Client, base string, entries []entry) ([]wireResult, error) {
	var body struct {
		Readings []wireReading `json:"readings"`
	}
	for _, e := range entries {
		body.Readings = append(body.Readings, e.wire())
	}
	var answer struct{ Results []wireResult }
	if err := call(ctx, client, http.MethodPost, base+"/v1/readings", body, &answer); err != nil {
		return nil, err
	}
	if len(answer.Results) != len(entries) {
		return nil, &wrongAnswer{fmt.Sprintf("%d results for %d readings", len(answer.Results), len(entries))}
	}
	return answer.Results, nil
}

// maxUnacknowledged is how many messages postStream has under way, below the
// 16 that the interface allows.
const maxUnacknowledged = 8

// postStream sends messages of up to 20 readings on one gRPC stream until
// something fails; acknowledgements must come in order.
func (j *journal) postStream(ctx context.Context, address string) error {
	conn, err := grpc.NewClient(address, grpc.WithTransportCredentials(insecure.NewCredentials()))
	if err != nil {
		return err
	}
	defer conn.Close()
	stream, err := leadlinev1.NewReadingServiceClient(conn).StreamReadings(ctx)
	if err != nil {
		return err
	}
	for sequence := uint64(1); ; sequence++ {
		message := &leadlinev1.StreamReadingsRequest{Sequence: sequence}
		for _, e := range j.next(1 + j.random.IntN(20)) {
			message.Readings = append(message.Readings, &leadlinev1.Reading{
				Quantity: string(e.quantity), Value: &e.value,
				Time: timestamppb.New(e.time.Time()), ReadingId: string(e.id),
				Instrument: string(e.by), Occasion: e.occasion,
			})
		}
		if err := stream.Send(message); err != nil && !errors.Is(err, io.EOF) {
			return err
		}
		if sequence <= maxUnacknowledged {
			continue
		}
		if err := j.takeAcknowledgement(stream, sequence-maxUnacknowledged); err != nil {
			return err
		}
	}
}

func (j *journal) takeAcknowledgement(stream leadlinev1.ReadingService_StreamReadingsClient, sequence uint64) error {
	answer, err := stream.Recv()
	if err != nil {
		return err
	}
	if answer.GetSequence() != sequence {
		return &wrongAnswer{fmt.Sprintf("message %d acknowledged, want %d", answer.GetSequence(), sequence)}
	}
	var results []wireResult
	for _, r := range answer.GetResults() {
		results = append(results, wireResult{r.GetReadingId(), r.GetStatus().String(), r.GetReason(), r.GetDetail()})
	}
	return j.take(results)
}
