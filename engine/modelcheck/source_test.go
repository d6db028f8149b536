package modelcheck_test

import (
	"encoding/csv"
	"flag"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"testing"
)

var seed = flag.Uint64("seed", 1, "seed of the simulation tests")

// source returns the random source of one test and logs what repeats it.
func source(t *testing.T) *rand.Rand {
	t.Helper()
	t.Logf("-seed %d", *seed)
	return rand.New(rand.NewPCG(*seed, 0))
}

// table reads the numbers of a CSV file of ../../testdata, without its comments and header.
func table(t *testing.T, name string) [][]float64 {
	t.Helper()
	f, err := os.Open(filepath.Join("..", "..", "testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil || len(rows) < 2 {
		t.Fatalf("%s has %d rows: %v", name, len(rows), err)
	}
	out := make([][]float64, len(rows)-1)
	for i, row := range rows[1:] {
		for _, s := range row {
			v, err := strconv.ParseFloat(s, 64)
			if err != nil {
				t.Fatal(err)
			}
			out[i] = append(out[i], v)
		}
	}
	return out
}

// near complains unless got is within the relative tolerance of want.
func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if d := math.Abs(got - want); !(d <= tolerance*math.Abs(want)) {
		t.Errorf("%s = %.17g, want %.17g, relative error %.2g above %.2g", what, got, want, d/math.Abs(want), tolerance)
	}
}

// within complains unless got is within the absolute tolerance of want.
func within(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if d := math.Abs(got - want); !(d <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g, error %.2g above %.2g", what, got, want, d, tolerance)
	}
}
