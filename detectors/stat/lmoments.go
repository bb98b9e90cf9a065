package stat

import (
	"math"
	"slices"
)

// LMoments describe a sample's place, spread and lean by expectations of
// order statistics. Unlike variance and skewness they are not ruled by the one
// largest value, so they suit short records.
type LMoments struct {
	L1 float64 // mean, in the sample's unit
	L2 float64 // half the mean difference of two values, in the sample's unit; never below 0
	T3 float64 // L3/L2, the L-skewness, between -1 and 1: 0 symmetric, 0.1699 Gumbel
}

// SampleLMoments returns the unbiased L-moments of a sample in any order
// (Hosking 1990, Journal of the Royal Statistical Society B 52:105-124,
// through the probability-weighted moments b_r of Landwehr et al. 1979: L1 =
// b0, L2 = 2 b1 - b0, L3 = 6 b2 - 6 b1 + b0).
//
// L2 needs two values and T3 three that are not all alike; without them they
// are NaN. A NaN in the sample makes all three NaN. O(n log n); it allocates a
// sorted copy.
func SampleLMoments(sample []float64) LMoments {
	nan := math.NaN()
	m := LMoments{L1: nan, L2: nan, T3: nan}
	x := slices.Clone(sample)
	slices.Sort(x) // NaN sorts first
	n := float64(len(x))
	if len(x) == 0 || math.IsNaN(x[0]) {
		return m
	}
	// The moments are taken about the smallest value: spread and lean do not
	// depend on place, and a sample of equal values has a spread of exactly 0.
	var b0, b1, b2 float64
	for i, v := range x {
		j, d := float64(i), v-x[0]
		b0 += d
		b1 += d * j
		b2 += d * j * (j - 1)
	}
	b0 /= n
	b1 /= n * (n - 1) // n = 1: 0/0, NaN as promised
	b2 /= n * (n - 1) * (n - 2)
	m.L1 = x[0] + b0
	m.L2 = max(0, 2*b1-b0)
	m.T3 = (6*b2 - 6*b1 + b0) / m.L2
	return m
}
