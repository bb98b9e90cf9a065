package stat

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// eulerGamma is the Euler-Mascheroni constant (OEIS A001620). It is the mean
// of the standard Gumbel distribution.
const eulerGamma = 0.57721566490153286

// Gumbel returns the Gumbel distribution of maxima that has these L-moments
// (Hosking 1990, table 1): beta = L2/ln 2, mu = L1 - 0.577216 beta. A sample
// without spread gives Beta 0, for which only ReturnLevel and Exceedance have
// a meaning; unknown L-moments give NaN.
func (m LMoments) Gumbel() distuv.GumbelRight {
	beta := m.L2 / math.Ln2
	return distuv.GumbelRight{Mu: m.L1 - eulerGamma*beta, Beta: beta}
}

// ReducedVariate returns -ln(-ln(1-1/T)), the standard Gumbel value that is
// passed once in T years on average (Gumbel 1958, Statistics of Extremes). T
// is above 1.
func ReducedVariate(years float64) float64 {
	return -math.Log(-math.Log1p(-1 / years))
}

// ReturnLevel returns what a year's maximum passes once in so many years on
// average, in the unit of g.
func ReturnLevel(g distuv.GumbelRight, years float64) float64 {
	return g.Mu + g.Beta*ReducedVariate(years)
}

// Exceedance returns the chance that a year's maximum passes x. With Beta 0
// every year's maximum is Mu.
func Exceedance(g distuv.GumbelRight, x float64) float64 {
	if g.Beta == 0 {
		if x < g.Mu {
			return 1
		}
		return 0
	}
	return g.Survival(x)
}
