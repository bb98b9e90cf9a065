package ledger

import (
	"fmt"
	"math"

	"saprolite/detectors/stat"
	"saprolite/ingest/quantity"
)

// Limit is how deep a stand's store may be drawn, as far as is known.
type Limit struct {
	Value     quantity.Millimetres // NaN when unknown
	Low, High quantity.Millimetres // 90 % interval; NaN when unknown
	Basis     string               // where Value came from; "unknown: " and the reason when there is none
}

const (
	// ReturnPeriod, in years: stands are taken to have rooted for the deficit
	// that comes once in so long. Forests fit droughts of 10 to 40 years (Gao et
	// al. 2014, Geophysical Research Letters 41:7916-7923).
	ReturnPeriod = 20
	// MinimumYears is what the limit needs: with fewer its interval is wider
	// than its value (a convention on the numbers of pivots).
	MinimumYears = 5
)

// Known tells whether there is a value.
func (l Limit) Known() bool { return !math.IsNaN(float64(l.Value)) }

// UnknownLimit is a Limit without a value; the reason completes "unknown: ".
func UnknownLimit(reason string) Limit {
	nan := quantity.Millimetres(math.NaN())
	return Limit{Value: nan, Low: nan, High: nan, Basis: "unknown: " + reason}
}

// LimitFromMaxima returns the deficit that a stand passes once in ReturnPeriod
// years, from the largest deficit, mm, of each complete hydrological year; the
// order does not matter and NaN counts as an incomplete year. It is a Gumbel
// distribution fitted by L-moments (Gao et al. 2014; Hosking 1990). Fewer than
// MinimumYears give an unknown limit.
//
// The maxima must come from measured water use or from unstressed demand. From
// stressed demand they would stop at the capacity that was assumed.
//
// The interval is of that 20-year deficit under the spread of so few years
// only: what is wrong with the deficits themselves comes on top. Low needs no
// floor at 0, since z95 is far below the reduced variate of 20 years. It is not
// raised to the largest deficit seen: n years pass the 20-year level with
// chance 1 - 0.95^n, 23 % at 5 years and 64 % at 20, so the largest is no lower
// bound of it, and the interval would miss too often. (It is a lower bound of
// the store itself, if the stand came through unharmed.) Equal maxima have no
// spread; all three are then that maximum.
func LimitFromMaxima(maxima []float64) Limit {
	years := make([]float64, 0, len(maxima))
	for _, m := range maxima {
		if !math.IsNaN(m) {
			years = append(years, m)
		}
	}
	n := len(years)
	if n < MinimumYears {
		plural := "s"
		if n == 1 {
			plural = ""
		}
		return UnknownLimit(fmt.Sprintf("%d complete year%s of annual maxima, needs %d", n, plural, MinimumYears))
	}
	g := stat.SampleLMoments(years).Gumbel()
	level := stat.ReturnLevel(g, ReturnPeriod)
	z05, z95 := pivot(n)
	return Limit{
		Value: quantity.Millimetres(level),
		Low:   quantity.Millimetres(level - z95*g.Beta),
		High:  quantity.Millimetres(level - z05*g.Beta),
		Basis: fmt.Sprintf("once-in-%d-years deficit from %d complete years", ReturnPeriod, n),
	}
}

// pivots holds, for n years, the 5 % and 95 % quantiles of z = (estimated -
// true 20-year level) / estimated beta. z depends on n alone, so the interval
// needs no random numbers; an ordinary bootstrap covers 0.56 instead of 0.90
// at n = 5. Made by testdata/pivot.go from a million samples each; the last
// digit of z05 is uncertain by 10 at n = 5 and by 1 to 6 below, that of z95 by
// 1 to 2 (testdata/pivot.csv has the standard errors).
var pivots = [...]struct{ n, z05, z95 float64 }{
	{5, -4.629, 1.526},
	{6, -3.834, 1.437},
	{7, -3.307, 1.361},
	{8, -2.952, 1.300},
	{9, -2.669, 1.247},
	{10, -2.455, 1.197},
	{12, -2.141, 1.119},
	{15, -1.827, 1.027},
	{20, -1.495, 0.917},
	{25, -1.296, 0.838},
	{30, -1.154, 0.777},
	{40, -0.966, 0.688},
	{60, -0.762, 0.577},
	{100, -0.570, 0.460},
}

// pivot interpolates the table in 1/n. Beyond its end it keeps the last row,
// which makes the interval a little too wide. n is at least MinimumYears.
func pivot(n int) (z05, z95 float64) {
	for i, row := range pivots {
		if float64(n) > row.n {
			continue
		}
		if i == 0 {
			return row.z05, row.z95
		}
		before := pivots[i-1]
		w := (1/float64(n) - 1/before.n) / (1/row.n - 1/before.n)
		return before.z05 + w*(row.z05-before.z05), before.z95 + w*(row.z95-before.z95)
	}
	last := pivots[len(pivots)-1]
	return last.z05, last.z95
}
