package modelcheck

import (
	"math"

	"gonum.org/v1/gonum/integrate/quad"
	"gonum.org/v1/gonum/mat"
)

// RunLength returns the mean number of scored readings until the two-sided CUSUM with
// k = 0.5 and threshold h detects a step that isn't there, from sums of 0; h from 1 to 25,
// relative error below 1e-7 where the result is at most 1e9.
//
// On one side L(z), the mean from a sum of z, solves
//
//	L(z) = 1 + L(0) F(k - z) + int_0^h L(x) f(x + k - z) dx
//
// with f and F the standard normal density and distribution function (Page 1954), here at
// Gauss-Legendre nodes. Both sides together have half of that: their
// rates add (Kemp 1961, J. R. Statist. Soc. B 23, 149-153, from memory).
func RunLength(h float64) float64 {
	// f is entire and has width 1. The number is odd, as gonum 0.17 has wrong
	// weights at 26 nodes.
	n := 17 + 2*int(1.5*h)
	x, w := make([]float64, n), make([]float64, n)
	quad.Legendre{}.FixedLocations(x, w, 0, h)

	x = append(x, 0) // the last unknown is L(0)
	a, ones := mat.NewDense(n+1, n+1, nil), mat.NewVecDense(n+1, nil)
	for i, z := range x {
		for j := range n {
			a.Set(i, j, -w[j]*density(x[j]+reference-z))
		}
		a.Set(i, n, -upperTail(z-reference))
		a.Set(i, i, a.At(i, i)+1)
		ones.SetVec(i, 1)
	}
	var l mat.VecDense
	// The matrix is 1 less the transitions among sums from which all detect at
	// last, so it has an inverse; a poor condition is reported from 1e15 on.
	if err := l.SolveVec(a, ones); err != nil {
		return math.Inf(1)
	}
	return l.AtVec(n) / 2
}

// Threshold returns the h at which RunLength is interval, from MinFalseAlarmInterval to
// MaxFalseAlarmInterval; relative error of the run length 3e-7. Siegmund's approximation (1985,
// Sequential Analysis, 10.16, from memory), L = 2 (e^b - b - 1) on one side with b = h + 1.166,
// starts; its error hardly depends on h, so a secant in ln L closes it.
func Threshold(interval float64) float64 {
	b := math.Log(interval)
	for range 8 {
		b = math.Log(interval + b + 1)
	}
	h := b - 1.166
	for range 6 {
		excess := math.Log(RunLength(h) / interval)
		h -= excess * -math.Expm1(-h-1.166)
		if math.Abs(excess) < 1e-5 { // what is left after the step is a few percent of it
			break
		}
	}
	return h
}
