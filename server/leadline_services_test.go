//go:build services

package server_test

import (
	"bufio"
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// process is leadline as it is delivered: a process of its own, reached over
// HTTP.
type process struct {
	t   testing.TB
	url string
}

func startLeadline(t testing.TB) *process {
	t.Helper()
	dir := t.TempDir()
	program := filepath.Join(dir, "leadline")
	if out, err := exec.CommandContext(t.Context(), "go", "build", "-o", program, "leadline.example/cmd/leadline").CombinedOutput(); err != nil {
		t.Fatalf("build: %v\n%s", err, out)
	}
	c := exec.Command(program, "serve", "--data-dir", filepath.Join(dir, "data"), "--http", "127.0.0.1:0", "--grpc", "127.0.0.1:0")
	var log bytes.Buffer
	c.Stderr = &log
	out, err := c.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := c.Process.Signal(syscall.SIGTERM); err != nil {
			t.Error(err)
		}
		if err := c.Wait(); err != nil {
			t.Errorf("leadline: %v\n%s", err, log.Bytes())
		}
	})
	line, err := bufio.NewReader(out).ReadBytes('\n')
	if err != nil {
		t.Fatalf("leadline said %q before %v", line, err)
	}
	var ready struct{ HTTP string }
	if err := json.Unmarshal(line, &ready); err != nil {
		t.Fatal(err)
	}
	return &process{t: t, url: "http://" + ready.HTTP}
}

// call sends a request and returns the decoded answer.
func (p *process) call(method, path, body string) map[string]any {
	p.t.Helper()
	r, err := http.NewRequestWithContext(p.t.Context(), method, p.url+path, strings.NewReader(body))
	if err != nil {
		p.t.Fatal(err)
	}
	response, err := http.DefaultClient.Do(r)
	if err != nil {
		p.t.Fatal(err)
	}
	defer response.Body.Close()
	text, err := io.ReadAll(response.Body)
	if err != nil {
		p.t.Fatal(err)
	}
	if response.StatusCode != http.StatusOK && response.StatusCode != http.StatusCreated {
		p.t.Fatalf("%s %s: %s %s", method, path, response.Status, text)
	}
	var answer map[string]any
	if err := json.Unmarshal(text, &answer); err != nil {
		p.t.Fatalf("%s %s: %v", method, path, err)
	}
	return answer
}

// declarePlant declares quantities of an invented cold store and posts
// readings: one that moves with time, one whose repeatability is learned, one
// with too few readings for a mean, one without any.
func (p *process) declarePlant() (ids []string) {
	p.t.Helper()
	for _, q := range []struct {
		id, declaration string
		values          []float64
	}{
		{"room-2.temperature", `{"unit":"Cel","description":"store room 2, \"north\" wall","prior":{"mean":-22,"standard_deviation":2},
			"repeatability":{"standard_deviation":0.5},"dynamics":{"random_walk":{"standard_deviation":1,"per":"3600s"}},"tolerance":{"upper":-18}}`,
			[]float64{-19.5, -19, -18.4}},
		{"dosing/chlorine", `{"unit":"mg/l","repeatability":{"learned":{}},"tolerance":{"lower":0.2,"upper":0.6}}`,
			[]float64{0.41, 0.43, 0.39, 0.42, 0.4}},
		{"slipway-winch.brake", `{"unit":"mm","repeatability":{"learned":{}},"tolerance":{"lower":4}}`, []float64{5.1, 5.2}},
		{"slipway-winch.rope", `{"unit":"mm","repeatability":{"standard_deviation":0.1}}`, nil},
		{"brine-pump-3.gap", `{"unit":"mm","prior":{"mean":0.8,"standard_deviation":0.05},"repeatability":{"standard_deviation":0.02},
			"tolerance":{"lower":0.7,"upper":0.9}}`, []float64{0.95, 0.96, 0.97, 0.95}},
	} {
		path := "/v1/quantities/" + strings.ReplaceAll(q.id, "/", "%2F")
		p.call(http.MethodPut, path, q.declaration)
		for i, v := range q.values {
			at := time.Now().Add(-time.Duration(len(q.values)-i) * time.Minute).UTC().Format(time.RFC3339)
			answer := p.call(http.MethodPost, path+"/readings", fmt.Sprintf(`{"value":%v,"time":%q}`, v, at))
			if status := answer["result"].(map[string]any)["status"]; status != "APPLIED" {
				p.t.Fatalf("reading of %s: %v", q.id, answer["result"])
			}
		}
		ids = append(ids, q.id)
	}
	return ids
}

func readFile(t testing.TB, path string) string {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}
