//go:build services

package server_test

import (
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"net"
	"net/http"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"
)

// prometheus is a real Prometheus server that scrapes one leadline by the
// configuration that is delivered, but every second.
type prometheus struct {
	t   testing.TB
	url string
}

func startPrometheus(t testing.TB, target string) *prometheus {
	t.Helper()
	dir := t.TempDir()
	configuration := readFile(t, filepath.Join(deployed, "prometheus.yml"))
	for old, new := range map[string]string{
		"127.0.0.1:8080": target, "scrape_interval: 15s": "scrape_interval: 1s",
		"scrape_timeout: 10s": "scrape_timeout: 1s", "evaluation_interval: 15s": "evaluation_interval: 1s",
	} {
		if !strings.Contains(configuration, old) {
			t.Fatalf("the configuration has no %q to replace", old)
		}
		configuration = strings.ReplaceAll(configuration, old, new)
	}
	for name, text := range map[string]string{
		"prometheus.yml": configuration, "leadline.rules.yml": readFile(t, filepath.Join(deployed, "leadline.rules.yml")),
	} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	address := freeAddress(t)
	var log lockedBuffer
	c := exec.Command("prometheus", "--config.file", filepath.Join(dir, "prometheus.yml"),
		"--storage.tsdb.path", filepath.Join(dir, "data"), "--web.listen-address", address)
	c.Stdout, c.Stderr = &log, &log
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		_ = c.Process.Kill()
		_ = c.Wait()
		if t.Failed() {
			t.Logf("prometheus said\n%s", log.String())
		}
	})
	return &prometheus{t: t, url: "http://" + address}
}

// freeAddress returns one that was free a moment ago.
func freeAddress(t testing.TB) string {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	return l.Addr().String()
}

// get asks the API; an error is left to eventually.
func (p *prometheus) get(ctx context.Context, path string, into any) error {
	r, err := http.NewRequestWithContext(ctx, http.MethodGet, p.url+path, nil)
	if err != nil {
		return err
	}
	response, err := http.DefaultClient.Do(r)
	if err != nil {
		return err
	}
	defer response.Body.Close()
	var answer struct {
		Status, Error string
		Data          json.RawMessage
	}
	if err := json.NewDecoder(response.Body).Decode(&answer); err != nil {
		return err
	}
	if answer.Status != "success" {
		return fmt.Errorf("GET %s: %s", path, answer.Error)
	}
	return json.Unmarshal(answer.Data, into)
}

// eventually asks until done is content.
func (p *prometheus) eventually(what string, done func(context.Context) error) {
	p.t.Helper()
	ctx, cancel := context.WithTimeout(p.t.Context(), time.Minute)
	defer cancel()
	tick := time.NewTicker(200 * time.Millisecond)
	defer tick.Stop()
	for {
		err := done(ctx)
		if err == nil {
			return
		}
		select {
		case <-tick.C:
		case <-ctx.Done():
			p.t.Fatalf("%s: %v", what, err)
		}
	}
}

// stored is one scrape as Prometheus keeps it: name{label="value",...} without
// job and instance, to the value.
type stored map[string]float64

// lastScrape returns the newest scrape of the last ten seconds.
func (p *prometheus) lastScrape(ctx context.Context) (stored, error) {
	var answer struct {
		Result []struct {
			Metric map[string]string
			Values [][2]any
		}
	}
	if err := p.get(ctx, "/api/v1/query?query="+url.QueryEscape(`{__name__=~"leadline_.+"}[10s]`), &answer); err != nil {
		return nil, err
	}
	var newest float64
	for _, r := range answer.Result {
		for _, v := range r.Values {
			newest = max(newest, v[0].(float64))
		}
	}
	scrape := stored{}
	for _, r := range answer.Result {
		for _, v := range r.Values {
			if v[0].(float64) != newest {
				continue
			}
			value, err := strconv.ParseFloat(v[1].(string), 64)
			if err != nil {
				return nil, err
			}
			scrape[seriesName(r.Metric)] = value
		}
	}
	return scrape, nil
}

func seriesName(metric map[string]string) string {
	var labels []string
	for _, name := range slices.Sorted(maps.Keys(metric)) {
		if name != "__name__" && name != "job" && name != "instance" {
			labels = append(labels, name+"="+metric[name])
		}
	}
	return metric["__name__"] + "{" + strings.Join(labels, ",") + "}"
}

// expected is what a page evaluated at the belief's time must carry of it.
func expected(belief map[string]any) stored {
	id := "quantity=" + belief["quantity"].(string)
	unit := ",unit=" + belief["unit"].(string)
	want := stored{"leadline_quantity_readings_total{" + id + "}": belief["reading_count"].(float64)}
	for field, name := range map[string]string{"mean": "leadline_posterior_mean", "standard_deviation": "leadline_posterior_standard_deviation"} {
		if v, ok := belief[field].(float64); ok {
			want[name+"{"+id+unit+"}"] = v
		}
	}
	if interval, ok := belief["interval"].(map[string]any); ok {
		labels := "{coverage_probability=" + strconv.FormatFloat(interval["coverage_probability"].(float64), 'g', -1, 64) + "," + id + unit + "}"
		want["leadline_posterior_interval_lower"+labels] = interval["lower"].(float64)
		want["leadline_posterior_interval_upper"+labels] = interval["upper"].(float64)
	}
	if breach, ok := belief["breach"].(map[string]any); ok {
		for side, v := range breach {
			want["leadline_breach_probability{"+id+",side="+side+"}"] = v.(float64)
		}
	}
	if verdict, ok := belief["verdict"].(string); ok {
		for _, v := range []string{"CONFORMS", "BREACHES", "INCONCLUSIVE"} {
			want["leadline_verdict{"+id+",verdict="+v+"}"] = 0
		}
		want["leadline_verdict{"+id+",verdict="+verdict+"}"] = 1
	}
	if check, ok := belief["model_check"].(map[string]any); ok {
		want.check(id, check)
	}
	return want
}

// check adds what a page must carry of a model check.
func (want stored) check(id string, check map[string]any) {
	want["leadline_model_check{"+id+",result="+check["result"].(string)+"}"] = 1
	want["leadline_steps_total{"+id+"}"] = check["step_count"].(float64)
	want["leadline_outlying_readings_total{"+id+"}"] = check["outlying_count"].(float64)
	for field, name := range map[string]string{
		"coverage_50":               "leadline_predictive_coverage{coverage_probability=0.5," + id + "}",
		"coverage_95":               "leadline_predictive_coverage{coverage_probability=0.95," + id + "}",
		"mean_squared_normal_score": "leadline_normal_score_mean_square{" + id + "}",
	} {
		if v, ok := check[field].(float64); ok {
			want[name] = v
		}
	}
}

// compare checks every series of the belief's quantity that depends on time.
func (s stored) compare(t *testing.T, belief map[string]any) {
	t.Helper()
	want := expected(belief)
	for name, v := range want {
		if got, ok := s[name]; !ok || got != v {
			t.Errorf("Prometheus has %s = %v (there: %t), REST says %v", name, got, ok, v)
		}
	}
	id := "quantity=" + belief["quantity"].(string)
	for name := range s {
		_, ok := want[name]
		fixed := strings.HasPrefix(name, "leadline_quantity_info{") || strings.HasPrefix(name, "leadline_tolerance_limit{") ||
			strings.HasPrefix(name, "leadline_last_reading_timestamp_seconds{")
		if strings.Contains(name, id) && !ok && !fixed {
			t.Errorf("Prometheus has %s, of which REST knows nothing", name)
		}
	}
}

func TestPrometheusStoresTheNumbersOfREST(t *testing.T) {
	s := startLeadline(t)
	ids := s.declarePlant()
	p := startPrometheus(t, strings.TrimPrefix(s.url, "http://"))

	var scrape stored
	p.eventually("a scrape with every quantity", func(ctx context.Context) (err error) {
		if scrape, err = p.lastScrape(ctx); err == nil && scrape["leadline_quantities{}"] != float64(len(ids)) {
			err = fmt.Errorf("the scrape has %d series, %v quantities", len(scrape), scrape["leadline_quantities{}"])
		}
		return err
	})
	at := time.UnixMilli(int64(scrape["leadline_evaluation_timestamp_seconds{}"]*1e3 + 0.5)).UTC().Format(time.RFC3339Nano)
	for _, id := range ids {
		scrape.compare(t, s.call(http.MethodGet, "/v1/quantities/"+strings.ReplaceAll(id, "/", "%2F")+"/belief?time="+at, ""))
	}
	p.checkRules()
	p.checkRetirement(s, ids[0])
}

// checkRules waits until every rule has been evaluated without error and the
// breach of the pump's gap is noticed.
func (p *prometheus) checkRules() {
	p.t.Helper()
	p.eventually("healthy rules and a pending LeadlineBreach", func(ctx context.Context) error {
		var answer struct {
			Groups []struct {
				Rules []struct{ Name, Health, State, LastError string }
			}
		}
		if err := p.get(ctx, "/api/v1/rules", &answer); err != nil {
			return err
		}
		states := map[string]string{}
		for _, g := range answer.Groups {
			for _, r := range g.Rules {
				if states[r.Name] = r.State; r.Health != "ok" {
					return fmt.Errorf("rule %s is %s %s", r.Name, r.Health, r.LastError)
				}
			}
		}
		if s := states["LeadlineBreach"]; s != "pending" && s != "firing" {
			return fmt.Errorf("%d rules, LeadlineBreach is %q", len(states), s)
		}
		return nil
	})
}

// checkRetirement waits until a retired quantity is gone from instant queries,
// which happens at the next scrape and not five minutes later.
func (p *prometheus) checkRetirement(s *process, id string) {
	p.t.Helper()
	s.call(http.MethodDelete, "/v1/quantities/"+id, "")
	p.eventually("the retired quantity to vanish", func(ctx context.Context) error {
		var answer struct{ Result []json.RawMessage }
		if err := p.get(ctx, "/api/v1/query?query="+url.QueryEscape(fmt.Sprintf("leadline_quantity_info{quantity=%q}", id)), &answer); err != nil {
			return err
		}
		if len(answer.Result) > 0 {
			return fmt.Errorf("there are still %d series", len(answer.Result))
		}
		return nil
	})
}
