package server

import (
	"net/http"
	"strconv"
	"strings"

	"leadline.example/engine"
)

// The media types of answers.
const (
	mediaJSON  = "application/json"
	mediaText  = "text/plain"
	mediaEvent = "text/event-stream"
)

// negotiate chooses among the offered media types, the first being the default,
// by the q-values of the Accept headers (RFC 9110, 12.5.1): the most specific
// range that names a type gives its quality, the highest quality wins, and the
// earlier offer wins a tie. It returns "" if none is acceptable.
func negotiate(header http.Header, offers ...string) string {
	accept := strings.TrimSpace(strings.Join(header.Values("Accept"), ","))
	if accept == "" {
		return offers[0]
	}
	best, bestQuality := "", 0.0
	for _, offer := range offers {
		if q := quality(accept, offer); q > bestQuality {
			best, bestQuality = offer, q
		}
	}
	return best
}

// quality returns the q-value that accept gives to an offer.
func quality(accept, offer string) float64 {
	kind, _, _ := strings.Cut(offer, "/")
	q, specificity := 0.0, 0
	for part := range strings.SplitSeq(accept, ",") {
		mediaRange, parameters, _ := strings.Cut(part, ";")
		s := 0
		switch strings.ToLower(strings.TrimSpace(mediaRange)) {
		case offer:
			s = 3
		case kind + "/*":
			s = 2
		case "*/*":
			s = 1
		}
		if s > specificity {
			q, specificity = qualityParameter(parameters), s
		}
	}
	return q
}

// qualityParameter returns the q among the parameters of a media range: 1
// without one, 0 if it can't be read.
func qualityParameter(parameters string) float64 {
	for parameter := range strings.SplitSeq(parameters, ";") {
		name, value, _ := strings.Cut(parameter, "=")
		if !strings.EqualFold(strings.TrimSpace(name), "q") {
			continue
		}
		q, err := strconv.ParseFloat(strings.TrimSpace(value), 64)
		if err != nil || !(q >= 0 && q <= 1) {
			return 0
		}
		return q
	}
	return 1
}

func notAcceptable(offers ...string) error {
	return &httpError{
		refused: refuse(engine.NotSupported, "", "the Accept header admits none of "+strings.Join(offers, ", ")+"; ask for one of them"),
		http:    http.StatusNotAcceptable,
	}
}
