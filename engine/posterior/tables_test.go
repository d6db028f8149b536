package posterior_test

import (
	"encoding/csv"
	"encoding/json"
	"flag"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"testing"
)

var seed = flag.Uint64("seed", 1, "seed of the property and simulation tests")

// source returns the random source of one test and logs what repeats it.
func source(t *testing.T) *rand.Rand {
	t.Helper()
	t.Logf("-seed %d", *seed)
	return rand.New(rand.NewPCG(*seed, 0))
}

// table reads a CSV file of ../../testdata, without its comments and header.
func table(t testing.TB, name string) [][]string {
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
	return rows[1:]
}

// column reads one column of numbers.
func column(t testing.TB, name string, i int) []float64 {
	t.Helper()
	var out []float64
	for _, row := range table(t, name) {
		out = append(out, number(t, row[i]))
	}
	return out
}

func number(t testing.TB, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// load reads a JSON file of ../../testdata.
func load(t testing.TB, name string, into any) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("..", "..", "testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, into); err != nil {
		t.Fatal(err)
	}
}

// near complains unless got is within the relative tolerance of want.
func near(t testing.TB, what string, got, want, tolerance float64) {
	t.Helper()
	if d := math.Abs(got - want); !(d <= tolerance*math.Abs(want)) {
		t.Errorf("%s = %.17g, want %.17g, relative error %.2g above %.2g", what, got, want, d/math.Abs(want), tolerance)
	}
}

// within complains unless got is within the absolute tolerance of want.
func within(t testing.TB, what string, got, want, tolerance float64) {
	t.Helper()
	if d := math.Abs(got - want); !(d <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g, error %.2g above %.2g", what, got, want, d, tolerance)
	}
}

// prints complains unless got rounds to want, given as printed; the
// source prints half a unit of its last digit.
func prints(t testing.TB, what string, got float64, want string) {
	t.Helper()
	decimals := 0
	for i := range want {
		if want[i] == '.' {
			decimals = len(want) - i - 1
		}
	}
	unit := math.Pow(10, -float64(decimals))
	within(t, what, got, number(t, want), unit/2*(1+1e-9))
}
