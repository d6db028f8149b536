package server

import (
	"encoding/json"
	"net/http"
	"time"

	healthgrpc "google.golang.org/grpc/health/grpc_health_v1"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// healthInterval is how often the health that gRPC tells follows the keeper's.
const healthInterval = time.Second

// pages lists what is served beside the API, by path.
func (s *Server) pages() map[string]http.Handler {
	pages := map[string]http.Handler{
		"/healthz":      http.HandlerFunc(s.healthz),
		"/readyz":       http.HandlerFunc(s.readyz),
		"/openapi.json": http.HandlerFunc(openAPI),
	}
	if s.options.Metrics != nil {
		pages["/metrics"] = s.options.Metrics
	}
	return pages
}

// healthz answers as long as the process does: what restarting would not mend,
// such as a full disk, is left to readyz.
func (s *Server) healthz(w http.ResponseWriter, r *http.Request) {
	writeState(w, r, http.StatusOK, "alive", "")
}

// readyz tells whether requests are taken, and why not.
func (s *Server) readyz(w http.ResponseWriter, r *http.Request) {
	if err := s.Ready(); err != nil {
		writeState(w, r, http.StatusServiceUnavailable, "not ready", err.Error())
		return
	}
	writeState(w, r, http.StatusOK, "ready", "")
}

// writeState answers whatever the request accepts, as probes often say nothing
// sensible about that.
func writeState(w http.ResponseWriter, r *http.Request, code int, state, detail string) {
	w.Header().Set("Cache-Control", "no-store")
	contentType, body := mediaJSON, []byte(nil)
	if negotiate(r.Header, mediaJSON, mediaText) == mediaText {
		contentType, body = textCodec{}.ContentType(nil), []byte(state)
		if detail != "" {
			body = append(body, ": "+detail...)
		}
	} else {
		// Two strings can always be written.
		body, _ = json.Marshal(struct {
			State  string `json:"state"`
			Detail string `json:"detail"`
		}{state, detail})
	}
	w.Header().Set("Content-Type", contentType)
	w.WriteHeader(code)
	_, _ = w.Write(append(body, '\n')) // a client that is gone can't be told
}

func openAPI(w http.ResponseWriter, _ *http.Request) {
	_ = answer(w, mediaJSON, []byte(leadlinev1.OpenAPI()))
}

// followHealth keeps what gRPC tells of its health true until the service stops.
func (s *Server) followHealth() {
	ticker := time.NewTicker(healthInterval)
	defer ticker.Stop()
	for {
		select {
		case <-ticker.C:
			s.publishHealth()
		case <-s.stopping:
			return
		}
	}
}

// publishHealth tells the same for every service, and for the empty name.
func (s *Server) publishHealth() {
	state := healthgrpc.HealthCheckResponse_SERVING
	if s.Ready() != nil {
		state = healthgrpc.HealthCheckResponse_NOT_SERVING
	}
	for _, name := range []string{
		"",
		leadlinev1.QuantityService_ServiceDesc.ServiceName,
		leadlinev1.InstrumentService_ServiceDesc.ServiceName,
		leadlinev1.ReadingService_ServiceDesc.ServiceName,
		leadlinev1.BeliefService_ServiceDesc.ServiceName,
	} {
		s.health.SetServingStatus(name, state)
	}
}
