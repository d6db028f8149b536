package server

import (
	"net/http"
	"strconv"
	"strings"
	"sync"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// ingest serves the two routes that take readings without the gateway, whose
// reflection costs more than the ledger. A body of the plain shape is scanned
// straight into engine readings; any other, be it unusual or wrong, goes the
// strict way, so that both give the same errors by construction.
type ingest struct {
	readings *readingService
	bodies   sync.Pool // of *[]byte
}

// maxPooledBody bounds the buffers that are kept for the next request.
const maxPooledBody = 1 << 20

func newIngest(readings *readingService) *ingest {
	return &ingest{readings: readings, bodies: sync.Pool{New: func() any { return new([]byte) }}}
}

// postReadings serves POST /v1/readings.
func (h *ingest) postReadings(w http.ResponseWriter, r *http.Request, _ string) error {
	media, id, err := h.head(r)
	if err != nil {
		return err
	}
	readings, err := h.read(w, r, decodeReadings)
	if err != nil {
		return err
	}
	results, err := h.readings.keeper.Post(r.Context(), engine.Batch{
		Readings: readings, Receive: engine.InstantOf(h.readings.now()), RequestID: id,
	})
	if err != nil {
		return err
	}
	if media == mediaText {
		return answer(w, textCodec{}.ContentType(nil), []byte(resultsText(results)))
	}
	// About what a result takes; one that is refused takes more.
	buffer := make([]byte, 0, 128+140*len(results))
	return answer(w, mediaJSON, appendResults(buffer, results))
}

// postReading serves POST /v1/quantities/{quantity}/readings.
func (h *ingest) postReading(w http.ResponseWriter, r *http.Request, quantity string) error {
	media, id, err := h.head(r)
	if err != nil {
		return err
	}
	readings, err := h.read(w, r, func(body []byte) ([]engine.Reading, error) { return decodeReading(quantity, body) })
	if err != nil {
		return err
	}
	result, belief, err := h.readings.post(r.Context(), readings[0], id)
	if err != nil {
		return err
	}
	if media == mediaText {
		text := resultsText([]engine.Result{result})
		if belief != nil {
			text += beliefText(belief)
		}
		return answer(w, textCodec{}.ContentType(nil), []byte(text))
	}
	body := appendResult(append(make([]byte, 0, 2048), `{"result":`...), 0, &result)
	if belief != nil {
		body = appendBelief(append(body, `,"belief":`...), beliefMessage(belief))
	}
	return answer(w, mediaJSON, append(body, "}\n"...))
}

// head reads what the headers say.
func (h *ingest) head(r *http.Request) (media, requestID string, err error) {
	if media, err = answerMedia(r); err != nil {
		return "", "", err
	}
	ids := r.Header.Values(keyRequestID)
	if len(ids) > 1 {
		return "", "", refuse(engine.InvalidField, keyRequestID, keyRequestID+" is given more than once; give it once")
	}
	if len(ids) == 1 {
		requestID = strings.TrimSpace(ids[0])
	}
	return media, requestID, checkRequestID(requestID)
}

// read reads the body into a buffer that is used again, and decodes it.
func (h *ingest) read(w http.ResponseWriter, r *http.Request, decode func([]byte) ([]engine.Reading, error)) ([]engine.Reading, error) {
	buffer := h.bodies.Get().(*[]byte)
	body, err := readBody(w, r, (*buffer)[:0])
	if err != nil {
		return nil, err
	}
	readings, err := decode(body)
	if cap(body) <= maxPooledBody {
		*buffer = body
		h.bodies.Put(buffer)
	}
	return readings, err
}

// decodeReadings decodes the body of a batch, and copies what it keeps of it.
func decodeReadings(body []byte) ([]engine.Reading, error) {
	if readings, ok := scanReadings(body); ok {
		return readings, nil
	}
	return decodeReadingsStrictly(body)
}

func decodeReadingsStrictly(body []byte) ([]engine.Reading, error) {
	message := new(leadlinev1.PostReadingsRequest)
	if err := decodeStrict(body, message, false); err != nil {
		return nil, err
	}
	return readingsOf(message.GetReadings())
}

// decodeReading decodes the body of a single reading of the named quantity.
func decodeReading(quantity string, body []byte) ([]engine.Reading, error) {
	if reading, ok := scanReading(quantity, body); ok {
		return []engine.Reading{reading}, nil
	}
	reading, err := decodeReadingStrictly(quantity, body)
	return []engine.Reading{reading}, err
}

func decodeReadingStrictly(quantity string, body []byte) (engine.Reading, error) {
	message := new(leadlinev1.Reading)
	if err := decodeStrict(body, message, false); err != nil {
		return engine.Reading{}, err
	}
	return readingOfQuantity(quantity, message)
}

func answer(w http.ResponseWriter, contentType string, body []byte) error {
	header := w.Header()
	header.Set("Content-Type", contentType)
	header.Set("Content-Length", strconv.Itoa(len(body)))
	_, _ = w.Write(body) // a client that is gone can't be told
	return nil
}
