package ledger

import (
	"math"

	"saprolite/ingest/quantity"
)

// DefaultCoefficient is what a closed forest uses of the reference when it has
// water enough: the 0.95 of FAO-56 for well-watered conifers (Allen et al.
// 1998, table 17, basal coefficient) less 10 %, because real stands stay below
// it (common practice of the trade, no source for the 10 %).
const DefaultCoefficient = 0.85

const (
	greennessExponent = 2.25 // Nagler et al. 2013, for the enhanced vegetation index (from memory)
	leastGreenness    = 0.3  // a bare stand still loses water from the ground (common practice of the trade, no source)
	mostGreenness     = 1.05 // leaves room above the 95th percentile (common practice of the trade, no source)
)

// GreennessFactor returns by how much a stand's present greenness g changes
// its coefficient: [1 - exp(-2.25 g)] / [1 - exp(-2.25 g95)], where g95 is the
// stand's own 95th percentile, between 0.3 and 1.05. It is 1, no change, when
// either is not known or g95 is not above 0.
func GreennessFactor(g, g95 quantity.Index) float64 {
	if !(g95 > 0) || math.IsNaN(float64(g)) {
		return 1
	}
	factor := math.Expm1(-greennessExponent*float64(g)) / math.Expm1(-greennessExponent*float64(g95))
	return max(leastGreenness, min(mostGreenness, factor))
}
