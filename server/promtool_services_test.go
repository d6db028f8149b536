//go:build services

package server_test

import (
	"io"
	"net/http"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// deployed is where the configuration for Prometheus stands.
var deployed = filepath.Join("..", "deploy", "prometheus")

func promtool(t *testing.T, input io.Reader, arguments ...string) {
	t.Helper()
	c := exec.CommandContext(t.Context(), "promtool", arguments...)
	c.Dir, c.Stdin = deployed, input
	if out, err := c.CombinedOutput(); err != nil {
		t.Errorf("promtool %s: %v\n%s", strings.Join(arguments, " "), err, out)
	}
}

func TestPromtoolAcceptsTheConfiguration(t *testing.T) {
	promtool(t, nil, "check", "config", "--lint=all", "--lint-fatal", "prometheus.yml")
	promtool(t, nil, "check", "rules", "--lint=all", "--lint-fatal", "leadline.rules.yml")
}

func TestAlertsFireWhenTheyShould(t *testing.T) {
	promtool(t, nil, "test", "rules", "leadline.rules.test.yml")
}

func TestPromtoolAcceptsThePage(t *testing.T) {
	s := startLeadline(t)
	s.declarePlant()
	response, err := http.Get(s.url + "/metrics")
	if err != nil {
		t.Fatal(err)
	}
	defer response.Body.Close()
	promtool(t, response.Body, "check", "metrics")
}
