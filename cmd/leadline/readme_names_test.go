package main

import (
	"encoding/json"
	"flag"
	"maps"
	"net/http"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"

	"google.golang.org/grpc"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// TestReadmeNamesAll holds the reference in README.md against the code: what
// one names, the other has.
func TestReadmeNamesAll(t *testing.T) {
	readme := readReadme(t)
	for _, tt := range []struct {
		name string
		code []string
		page *regexp.Regexp // finds these names in README.md; nil: only that all are there
	}{
		{"reason", reasonNames(), nil},
		{"flag", flagNames(), regexp.MustCompile("`(--[a-z-]+)`")},
		{"metric", metricNames(t), regexp.MustCompile("`(leadline_[a-z_]+)`")},
		{"alert", alertNames(t), regexp.MustCompile("`(Leadline[A-Za-z]+)`")},
		{"call", callNames(t), regexp.MustCompile("(?m)^\\| `((?:GET|PUT|POST|DELETE) /v1/[^?`]*)")},
		{"gRPC method", methodNames(), nil},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if len(tt.code) == 0 {
				t.Fatal("the code has none, so nothing is compared")
			}
			for _, name := range tt.code {
				if !strings.Contains(readme, name) {
					t.Errorf("README.md doesn't name %s %s", tt.name, name)
				}
			}
			if tt.page == nil {
				return
			}
			for _, found := range tt.page.FindAllStringSubmatch(readme, -1) {
				if !slices.Contains(tt.code, found[1]) {
					t.Errorf("README.md names %s %s, which doesn't exist", tt.name, found[1])
				}
			}
		})
	}
}

func reasonNames() []string {
	var names []string
	for _, r := range slices.Concat(engine.ReadingReasons[:], engine.RequestReasons[:]) {
		names = append(names, "`"+string(r)+"`")
	}
	return names
}

// flagNames lists the flags of serve and demo, those that only one has by hand.
func flagNames() []string {
	names := []string{"--data-dir", "--seed"}
	flags := flag.NewFlagSet("serve", flag.ContinueOnError)
	declareFlags(flags, new(settings), func(string) string { return "" })
	flags.VisitAll(func(f *flag.Flag) { names = append(names, "--"+f.Name) })
	return names
}

// metricNames lists the metrics of an empty service; the one that comes with
// the first gRPC request is added by hand.
func metricNames(t *testing.T) []string {
	page := request(t, http.MethodGet, serveForReadme(t)+"/metrics", "", http.Header{}, false)
	names := []string{"leadline_grpc_requests_total"}
	for _, found := range regexp.MustCompile(`(?m)^# TYPE (leadline_\S+)`).FindAllStringSubmatch(page, -1) {
		names = append(names, found[1])
	}
	return names
}

func alertNames(t *testing.T) []string {
	rules, err := os.ReadFile(filepath.Join("..", "..", "deploy", "prometheus", "leadline.rules.yml"))
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, found := range regexp.MustCompile(`- alert: (\S+)`).FindAllStringSubmatch(string(rules), -1) {
		names = append(names, found[1])
	}
	return names
}

// callNames lists the calls of the OpenAPI document, in which the variable of a
// path has the name of its field.
func callNames(t *testing.T) []string {
	var document struct {
		Paths map[string]map[string]json.RawMessage
	}
	if err := json.Unmarshal([]byte(leadlinev1.OpenAPI()), &document); err != nil {
		t.Fatal(err)
	}
	var names []string
	for path, calls := range document.Paths {
		for method := range maps.Keys(calls) {
			names = append(names, strings.ToUpper(method)+" "+strings.ReplaceAll(path, "{quantity}", "{id}"))
		}
	}
	return names
}

func methodNames() []string {
	var names []string
	for _, service := range []grpc.ServiceDesc{
		leadlinev1.QuantityService_ServiceDesc, leadlinev1.InstrumentService_ServiceDesc,
		leadlinev1.ReadingService_ServiceDesc, leadlinev1.BeliefService_ServiceDesc,
	} {
		for _, m := range service.Methods {
			names = append(names, "`"+m.MethodName+"`")
		}
		for _, s := range service.Streams {
			names = append(names, "`"+s.StreamName+"`")
		}
	}
	return names
}
