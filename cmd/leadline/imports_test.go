package main

import (
	"os/exec"
	"slices"
	"strings"
	"testing"
)

const modulePath = "leadline.example/"

// importRule says what a package may import directly. Indirect imports are
// not looked at: gonum itself pulls in os and time.
type importRule struct {
	pkg       string
	allowed   []string // import paths; one that ends in "/..." allows all below it
	forbidden []string // same form, against allowed
	why       string
}

var importRules = []importRule{
	{
		pkg:     "engine/posterior",
		allowed: []string{"cmp", "encoding/binary", "errors", "fmt", "math", "math/bits", "math/rand/v2", "slices", "sort", "gonum.org/v1/gonum/..."},
		why:     "the statistics are pure functions of numbers: same arguments, same bits, whoever calls; a generator only with a fixed seed",
	},
	{
		pkg:     "engine/decide",
		allowed: []string{"errors", "fmt", "math", "slices", "sort", "gonum.org/v1/gonum/...", modulePath + "engine/posterior"},
		why:     "a verdict is a pure function of a belief, so that it can be recomputed in an audit",
	},
	{
		pkg:     "engine/modelcheck",
		allowed: []string{"encoding/binary", "errors", "fmt", "math", "math/bits", "math/cmplx", "slices", "gonum.org/v1/gonum/...", modulePath + "engine/posterior"},
		why:     "a check of the model is a pure function of scores and times, so that a replay gives the same",
	},
	{
		pkg: "engine",
		allowed: []string{
			"bytes", "cmp", "container/heap", "context", "encoding/binary", "errors", "fmt", "hash/fnv", "hash/maphash", "iter", "maps",
			"math", "math/bits", "runtime", "slices", "sort", "strconv", "strings", "sync", "sync/atomic", "time",
			"unicode", "unicode/utf8", "unsafe",
			modulePath + "engine/decide", modulePath + "engine/modelcheck", modulePath + "engine/posterior",
		},
		why: "the engine reads no file or socket and knows no wire format, so that ledger and front can be exchanged",
	},
	{
		pkg: "persist",
		allowed: []string{
			"bufio", "bytes", "cmp", "context", "crypto/sha256", "encoding/...", "errors", "fmt", "hash", "hash/crc32", "io", "io/fs",
			"iter", "maps", "math", "math/bits", "os", "path/filepath", "runtime", "runtime/debug", "slices", "sort", "strconv",
			"strings", "sync", "sync/atomic", "syscall", "time", "unsafe",
			"go.etcd.io/bbolt", "go.etcd.io/bbolt/errors", "google.golang.org/protobuf/encoding/protowire", "golang.org/x/sys/...",
			modulePath + "engine", modulePath + "engine/decide",
		},
		why: "the ledger knows bytes, pages and syncs, but no statistic and no protocol",
	},
	{
		pkg:       "server",
		allowed:   []string{"..."},
		forbidden: []string{modulePath + "persist/...", modulePath + "cmd/...", "go.etcd.io/bbolt/...", "gonum.org/v1/gonum/..."},
		why:       "the server maps and decides nothing: it reaches the ledger through the engine only and computes no probability",
	},
}

func (r importRule) allows(path string) bool {
	return matchesAny(r.allowed, path) && !matchesAny(r.forbidden, path)
}

func matchesAny(patterns []string, path string) bool {
	return slices.ContainsFunc(patterns, func(pattern string) bool {
		prefix, below := strings.CutSuffix(pattern, "...")
		if !below {
			return path == pattern
		}
		return strings.HasPrefix(path, prefix) || path == strings.TrimSuffix(prefix, "/")
	})
}

func TestPackagesImportOnlyWhatTheyMay(t *testing.T) {
	for _, rule := range importRules {
		t.Run(rule.pkg, func(t *testing.T) {
			for _, path := range goList(t, `{{join .Imports "\n"}}`, rule.pkg) {
				if !rule.allows(path) {
					t.Errorf("%s imports %s; it may not, because %s", rule.pkg, path, rule.why)
				}
			}
		})
	}
}

// TestImportRulesRefuse shows that the rules above can fail.
func TestImportRulesRefuse(t *testing.T) {
	for _, tt := range []struct {
		pkg, path string
		want      bool
		why       string
	}{
		{"engine", "os", false, "not in the list"},
		{"engine", modulePath + "persist", false, "the ledger depends on the engine"},
		{"engine/posterior", "gonum.org/v1/gonum/mathext", true, "below an allowed tree"},
		{"engine/posterior", "gonum.org/v1/gonumfake", false, "beside the tree, not below it"},
		{"server", "net/http", true, "all is allowed that isn't forbidden"},
		{"server", modulePath + "persist", false, "the root of a forbidden tree"},
	} {
		i := slices.IndexFunc(importRules, func(r importRule) bool { return r.pkg == tt.pkg })
		if i < 0 {
			t.Fatalf("there is no rule for %s", tt.pkg)
		}
		if importRules[i].allows(tt.path) != tt.want {
			t.Errorf("rule of %s allows %s: %v, although %s", tt.pkg, tt.path, !tt.want, tt.why)
		}
	}
}

// TestEngineReadsNoClock closes the hole that the import list leaves: time is
// needed for durations and formatting.
func TestEngineReadsNoClock(t *testing.T) {
	for _, pkg := range []string{"engine", "engine/decide", "engine/modelcheck", "engine/posterior"} {
		for file, source := range readSources(t, pkg) {
			for _, call := range []string{"time.Now(", "time.Since(", "time.Until(", "time.After(", "time.NewTimer(", "time.NewTicker(", "time.Sleep("} {
				if strings.Contains(source, call) {
					t.Errorf("%s calls %s...); time is an argument there, so that a ledger can be replayed", file, call)
				}
			}
		}
	}
}

func goList(t *testing.T, format, pkg string) []string {
	t.Helper()
	out, err := exec.Command("go", "list", "-f", format, modulePath+pkg).Output()
	if err != nil {
		t.Fatalf("go list %s: %v", pkg, err)
	}
	return strings.Fields(string(out))
}
