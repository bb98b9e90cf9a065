package ledger

import (
	"math"

	"saprolite/ingest/quantity"
)

// Store is the water account of one stand at the end of a day: all that the
// next day needs. The zero Store is full to its drained state under a dry
// canopy.
//
// Snow will join as a third store, filled before interception (its share of
// the precipitation never reaches the canopy) and emptied after canopy
// evaporation, when melt joins throughfall.
type Store struct {
	_ struct{} `cbor:",toarray"`

	Deficit quantity.Millimetres // missing from drained full, never below 0
	Canopy  quantity.Millimetres // rain hanging in the canopy
}

// Params is what does not change from day to day.
type Params struct {
	CanopyStore quantity.Millimetres // what the canopy can hold; 0: no interception
	// Capacity is what the store holds for the trees. It acts only on modelled
	// evapotranspiration: measured water use already tells what the store
	// could give. NaN: never short.
	Capacity quantity.Millimetres
	StressAt float64 // share of Capacity used above which trees hold back, 0 to 1
}

// DefaultCanopyStore is 0.2 mm a unit of leaf area index at an index of 7 to
// 8, the middle of 0.8 to 2.5 mm in use for forests (common practice of the
// trade, no source).
const DefaultCanopyStore quantity.Millimetres = 1.5

// DefaultStressAt is the depletion fraction p, at the low end of the 0.5 to
// 0.7 that FAO-56 has for most trees (Allen et al. 1998, table 22, from
// memory).
const DefaultStressAt = 0.5

// Input is one day's water. Rain, and either GivenET or both of ReferenceET
// and Coefficient, must be known (not NaN).
type Input struct {
	Rain        quantity.Millimetres // liquid precipitation above the canopy, not below 0
	ReferenceET quantity.Millimetres // not below 0; NaN: not known
	Coefficient float64              // ReferenceET x this is what the stand would use with water enough
	GivenET     quantity.Millimetres // measured, all of it with what the canopy evaporates; NaN: to be modelled
}

func (in *Input) known() bool {
	rain := in.Rain >= 0
	modelled := in.ReferenceET >= 0 && in.Coefficient >= 0
	return rain && (modelled || !math.IsNaN(float64(in.GivenET)))
}

// Flux is where one day's water went. Nothing is made or lost:
//
//	Rain                 = Input + Interception + growth of Canopy
//	Input + Interception = ActualET + Overflow - growth of Deficit
type Flux struct {
	_ struct{} `cbor:",toarray"`

	Input        quantity.Millimetres // liquid water reaching the root zone
	Interception quantity.Millimetres // evaporated from the canopy
	ActualET     quantity.Millimetres // from root zone and canopy together
	Overflow     quantity.Millimetres // past the full store: recharge and runoff
	// Discarded is how far a given evapotranspiration was below 0 (dew, or noise
	// of the instrument); it was taken as 0.
	Discarded quantity.Millimetres
	// Stress is what a short store leaves of the demand: 1 none, 0 closed. NaN
	// when evapotranspiration is given: the measurement contains it.
	Stress float64
}

// UnknownFlux is the flux of a day on which the account stood still: all NaN.
func UnknownFlux() Flux {
	nan := quantity.Millimetres(math.NaN())
	return Flux{Input: nan, Interception: nan, ActualET: nan, Overflow: nan, Discarded: nan, Stress: math.NaN()}
}

// Day adds one day to the account and returns its fluxes. The order matters:
//
//  1. rain fills the canopy, the rest falls through;
//  2. the canopy dries at the reference rate;
//  3. the trees draw what is left of the day's use from the root zone: given,
//     GivenET less canopy evaporation, or modelled, Coefficient x ReferenceET
//     less canopy evaporation, times stress, and never more than the store
//     still holds;
//  4. throughfall refills the root zone; what finds no room overflows.
//
// The recursion of the deficit is Wang-Erlandsson et al. 2016 (Hydrology and
// Earth System Sciences 20:1459-1481). Stress is equation 84 of FAO-56 with
// the store's state at the day's beginning.
//
// Without a reference, the canopy dries at most by the given
// evapotranspiration, which contains it. With one, the canopy wins over a
// smaller given value: the root zone then gives nothing and ActualET is above
// GivenET. A deficit above Capacity, left by measured days, is kept on a
// modelled day until rain refills it.
//
// A day that is not known (Input) leaves the account as it is and returns
// UnknownFlux; a rain, reference or coefficient below 0 counts as not known.
// Day does not allocate.
func (s *Store) Day(in Input, p *Params) Flux {
	if !in.known() {
		return UnknownFlux()
	}
	var f Flux
	given := !math.IsNaN(float64(in.GivenET))
	if given && in.GivenET < 0 {
		f.Discarded, in.GivenET = -in.GivenET, 0
	}

	caught := min(in.Rain, max(0, p.CanopyStore-s.Canopy))
	s.Canopy += caught
	f.Input = in.Rain - caught

	drying := in.ReferenceET
	if !(drying >= 0) {
		drying = in.GivenET
	}
	f.Interception = min(s.Canopy, drying)
	s.Canopy -= f.Interception

	var drawn quantity.Millimetres
	deficit := s.Deficit
	if given {
		f.Stress = math.NaN()
		drawn = max(0, in.GivenET-f.Interception)
		deficit += drawn
	} else {
		f.Stress = p.stress(s.Deficit)
		// The conversions keep the compiler from fusing a product into a sum, so
		// that every processor gets the same bits.
		demand := max(0, quantity.Millimetres(in.Coefficient*float64(in.ReferenceET))-f.Interception)
		drawn = quantity.Millimetres(float64(demand) * f.Stress)
		deficit, drawn = p.draw(s.Deficit, drawn)
	}
	f.ActualET = f.Interception + drawn

	deficit -= f.Input
	f.Overflow = max(0, -deficit)
	s.Deficit = max(0, deficit)
	return f
}

// stress returns Ks, what a store drawn down so far leaves of the demand.
func (p *Params) stress(deficit quantity.Millimetres) float64 {
	left := p.Capacity - deficit
	enough := p.Capacity * quantity.Millimetres(1-p.StressAt)
	switch {
	case math.IsNaN(float64(p.Capacity)) || left >= enough:
		return 1
	case left <= 0:
		return 0
	}
	return float64(left / enough)
}

// draw takes water from the root zone, at most what the store still holds. It
// does so before the day's rain is added: bounding after it instead would let
// a fuller store end the day emptier where one day's demand passes the
// stressed part of the store.
func (p *Params) draw(deficit, wanted quantity.Millimetres) (after, drawn quantity.Millimetres) {
	left := max(0, p.Capacity-deficit) // NaN without a capacity
	if wanted >= left {
		return max(deficit, p.Capacity), left
	}
	return deficit + wanted, wanted
}
