package server_test

import (
	"os"
	"strings"
	"testing"
)

// corpusBody is a body of testdata/bodies/readings.txt with its verdict.
type corpusBody struct{ body, verdict string }

func corpus(t testing.TB) []corpusBody {
	t.Helper()
	text, err := os.ReadFile("testdata/bodies/readings.txt")
	if err != nil {
		t.Fatal(err)
	}
	var bodies []corpusBody
	var lines []string
	for line := range strings.SplitSeq(string(text), "\n") {
		if verdict, ends := strings.CutPrefix(line, "> "); ends {
			bodies, lines = append(bodies, corpusBody{strings.Join(lines, "\n"), verdict}), nil
		} else if line != "" && !strings.HasPrefix(line, "#") {
			lines = append(lines, line)
		}
	}
	if len(bodies) < 70 {
		t.Fatalf("only %d bodies in the corpus", len(bodies))
	}
	return bodies
}
