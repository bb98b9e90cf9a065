//go:build ignore

// Pivot makes pivot.csv, the table behind the interval of the storage limit:
//
//	go run pivot.go > pivot.csv
//
// For n values from a standard Gumbel distribution (mu 0, beta 1), fitted by
// L-moments, the pivot is z = (fitted 20-year level - true 20-year level) /
// fitted beta. Its distribution depends on n only. The columns are n, the 5 %
// and the 95 % quantile of z in a million samples, and the standard error of
// each quantile, from the spread over 20 batches. It shares no code with the
// program.
package main

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
)

func main() {
	const draws, batches = 1_000_000, 20
	y := -math.Log(-math.Log(1 - 1./20))
	fmt.Println("n,z05,z95,z05_se,z95_se")
	for _, n := range []int{5, 6, 7, 8, 9, 10, 12, 15, 20, 25, 30, 40, 60, 100} {
		r := rand.New(rand.NewPCG(20, uint64(n)))
		x, z := make([]float64, n), make([]float64, draws)
		for i := range z {
			var mean, b1 float64
			for j := range x {
				x[j] = -math.Log(r.ExpFloat64()) // minus the log of an exponential value is Gumbel
			}
			slices.Sort(x)
			for j, v := range x {
				mean += v / float64(n)
				b1 += v * float64(j) / float64(n-1) / float64(n)
			}
			beta := (2*b1 - mean) / math.Ln2
			mu := mean - 0.5772156649015329*beta
			z[i] = (mu + beta*y - y) / beta
		}
		var low, high [batches]float64
		for b := range batches {
			part := slices.Sorted(slices.Values(z[b*draws/batches : (b+1)*draws/batches]))
			low[b], high[b] = quantile(part, 0.05), quantile(part, 0.95)
		}
		slices.Sort(z)
		fmt.Printf("%d,%.3f,%.3f,%.4f,%.4f\n", n, quantile(z, 0.05), quantile(z, 0.95), standardError(low[:]), standardError(high[:]))
	}
}

// quantile interpolates between the order statistics of a sorted sample.
func quantile(x []float64, p float64) float64 {
	at := p * float64(len(x)-1)
	i := int(at)
	return x[i] + (at-float64(i))*(x[i+1]-x[i])
}

// standardError is that of the mean of independent batches.
func standardError(x []float64) float64 {
	var mean, squares float64
	for _, v := range x {
		mean += v / float64(len(x))
	}
	for _, v := range x {
		squares += (v - mean) * (v - mean)
	}
	return math.Sqrt(squares / float64(len(x)-1) / float64(len(x)))
}
