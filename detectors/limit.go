package detectors

import (
	"fmt"
	"math"

	"saprolite/detectors/ledger"
	"saprolite/ingest/quantity"
)

// rootsDeepen is how many years after planting a stand's roots still deepen,
// so that past maxima say little (methods, decisions: "Change of the stand").
const rootsDeepen = 10

// refreshLimit makes the storage limit anew from settings and closed years.
// It is called once a year and after a restore, never in the daily step.
func (s *Stand) refreshLimit() {
	o := &s.opts
	nan := quantity.Millimetres(math.NaN())
	// By the running hydrological year, not the day: a restore within it must
	// find the same.
	switch year := (s.State.Year.Start - 1).Year(); {
	case o.extraWater():
		s.limit = ledger.UnknownLimit("extra water is " + o.ExtraWater + "; the account is what rain alone explains")
	case o.configuredLimit():
		s.limit = ledger.Limit{Value: o.StorageLimit, Low: nan, High: nan, Basis: "configured"}
	case o.Established > 0 && year-o.Established < rootsDeepen:
		s.limit = ledger.UnknownLimit(fmt.Sprintf("roots still deepening, planted %d", o.Established))
	default:
		s.limit = ledger.LimitFromMaxima(s.maxima())
		if measured, known := s.measuredShare(); known && s.limit.Known() {
			switch {
			case measured > 0.5:
				s.limit.Basis += ", measured evapotranspiration"
			default:
				s.limit.Basis += ", evapotranspiration modelled without stress"
			}
		}
	}
}

// counts tells whether a closed year enters the statistics: it is complete,
// and the stand had its roots.
func (s *Stand) counts(y *Year) bool {
	return y.Complete() && y.Start.Year()-s.opts.Established >= rootsDeepen
}

// maxima returns the largest deficit of each complete year. They come from
// measured evapotranspiration or from demand without stress: a stand with a
// configured limit never gets here (methods, decisions: "No circle").
func (s *Stand) maxima() []float64 {
	var list []float64
	for i := range s.years {
		y := &s.years[i]
		if s.counts(y) {
			list = append(list, float64(y.Max))
		}
	}
	return list
}

func (s *Stand) measuredShare() (share float64, ok bool) {
	var measured, all int
	for i := range s.years {
		if s.counts(&s.years[i]) {
			measured += int(s.years[i].Measured)
			all += int(s.years[i].Known)
		}
	}
	return float64(measured) / float64(all), all > 0
}
