package engine_test

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
)

// tabled is a distribution in tables.
type tabled struct {
	x, density, below, above []float64
	log                      float64 // ln of the readings' density
	mean, square             float64 // moments about 0
	exp, expSquare           float64 // of exp x
}

// tabulate sums a density given by its logarithm at points h apart by the trapezoid rule, on
// points fine times as close, between which ln of it is a polynomial through six.
func tabulate(lo, h float64, logs []float64, fine int) *tabled {
	top := floats.Max(logs)
	first, last := inner(logs, 75)
	t := &tabled{}
	step, n := h/float64(fine), (last-first)*fine+1
	for k := range n {
		i, part := first+k/fine, float64(k%fine)/float64(fine)
		t.x = append(t.x, lo+h*(float64(i)+part))
		t.density = append(t.density, math.Exp(sixth(logs, i, part, top-300)-top))
	}
	sum := 0.0
	for _, p := range t.density {
		sum += p * step
	}
	t.log = top + math.Log(sum)
	t.below, t.above = make([]float64, n), make([]float64, n)
	for k := range t.density {
		t.density[k] /= sum
		x, p := t.x[k], t.density[k]*step
		t.mean += p * x
		t.square += p * x * x
		t.exp += p * math.Exp(x)
		t.expSquare += p * math.Exp(2*x)
		if k > 0 {
			t.below[k] = t.below[k-1] + step*(t.density[k-1]+t.density[k])/2
		}
	}
	for k := n - 2; k >= 0; k-- {
		t.above[k] = t.above[k+1] + step*(t.density[k]+t.density[k+1])/2
	}
	return t
}

// inner returns the first and last index at which a density isn't far below its highest.
func inner(logs []float64, drop float64) (first, last int) {
	top := floats.Max(logs)
	first, last = len(logs)-1, 0
	for i, v := range logs {
		if v > top-drop {
			first, last = min(first, i), max(last, i)
		}
	}
	return max(0, first-1), min(len(logs)-1, last+1)
}

// sixth interpolates at i + part by Lagrange's formula (DLMF 3.3.1).
func sixth(f []float64, i int, part, least float64) float64 {
	if part == 0 {
		return math.Max(f[i], least)
	}
	n := min(6, len(f))
	from := max(0, min(i-2, len(f)-n))
	x, sum := float64(i-from)+part, 0.0
	for j := range n {
		w := 1.0
		for k := range n {
			if k != j {
				w *= (x - float64(k)) / float64(j-k)
			}
		}
		sum += w * math.Max(f[from+j], least)
	}
	return sum
}

// tail returns the probability beyond x on a side, -1 or 1.
func (t *tabled) tail(x float64, side int) float64 {
	n := len(t.x)
	if x <= t.x[0] || x >= t.x[n-1] {
		if (side < 0) == (x >= t.x[n-1]) {
			return 1
		}
		return 0
	}
	i, _ := slices.BinarySearch(t.x, x)
	i = max(1, i)
	share := (x - t.x[i-1]) / (t.x[i] - t.x[i-1])
	here := t.density[i-1] + share*(t.density[i]-t.density[i-1])
	if side < 0 {
		return t.below[i-1] + (x-t.x[i-1])*(t.density[i-1]+here)/2
	}
	return t.above[i] + (t.x[i]-x)*(t.density[i]+here)/2
}
