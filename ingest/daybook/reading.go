package daybook

import (
	"cmp"
	"encoding/binary"
	"hash/fnv"
	"math"
	"slices"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// Reading is one observation as kept for folding: times in Unix nanoseconds.
// Its identity within a book is quantity, Start and End (methods J.2).
type Reading struct {
	_ struct{} `cbor:",toarray"`

	Start, End int64
	Value, SD  float64
	Flag       observation.Flag
	Available  int64
}

// newer tells whether r replaces s where both speak for the same time: the
// later available wins, ties are broken by content, never by arrival
// (methods, decisions: "Order").
func (r Reading) newer(s Reading) bool {
	if r.Available != s.Available {
		return r.Available > s.Available
	}
	return r.hash() > s.hash()
}

func (r Reading) hash() uint64 {
	var b [17]byte
	// One pattern of bits for "unknown": a NaN that was read from a page has another.
	binary.LittleEndian.PutUint64(b[0:], math.Float64bits(oneNaN(r.Value)))
	binary.LittleEndian.PutUint64(b[8:], math.Float64bits(oneNaN(r.SD)))
	b[16] = byte(r.Flag)
	h := fnv.New64a()
	h.Write(b[:])
	return h.Sum64()
}

// sameContent tells whether two readings say the same, whenever they were known.
func (r Reading) sameContent(s Reading) bool {
	return sameFloat(r.Value, s.Value) && sameFloat(r.SD, s.SD) && r.Flag == s.Flag
}

func sameFloat(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }

// insert puts r among readings sorted by Start, then by End from long to
// short. It tells whether anything was written, and if not, whether r says
// something else than what is there and is not newer.
func insert(list []Reading, r Reading) (out []Reading, written, outdated bool) {
	i, found := slices.BinarySearchFunc(list, r, func(a, b Reading) int {
		if c := cmp.Compare(a.Start, b.Start); c != 0 {
			return c
		}
		return cmp.Compare(b.End, a.End)
	})
	if !found {
		return slices.Insert(list, i, r), true, false
	}
	if !r.newer(list[i]) {
		return list, false, !r.sameContent(list[i])
	}
	list[i] = r
	return list, true, false
}

// fold makes the day value of the day [from, to) from its readings, which are
// sorted as insert keeps them. expected is the source's interval between
// readings, zero when it is not known.
//
// Totals are summed, an interval across midnight in proportion to time
// (methods J.1); means are weighted by time, instants equally; extremes are
// the extreme. A usable reading of exactly the day is the day, whatever else
// overlaps it; of other readings that overlap, the one that begins first and
// lasts longest counts. A day with a part missing is suspect: a total of
// intervals with any gap between them, or with an unusable reading; of a known
// interval, a total that is not all there and any other less than 90 % of it
// (methods J.1). Instants of a source without an interval are taken as all
// there is: a tipping bucket that reports each tip.
func fold(how quantity.Fold, from, to int64, expected time.Duration, list []Reading) observation.DayValue {
	const complete = 0.90 // methods J.1
	for _, r := range list {
		if r.Start == from && r.End == to && r.Flag.Usable() && !math.IsNaN(r.Value) {
			list, expected = []Reading{r}, 0
			break
		}
	}
	v := observation.DayValue{Value: math.NaN(), SD: math.NaN(), Flag: observation.Missing}
	var sum, weights, variance float64
	var covered int64 // time for which there is a usable value
	var usable, unusable, instants int
	last, available := int64(math.MinInt64), int64(math.MinInt64)
	worst := observation.Flag(0)
	for _, r := range list {
		if r.End > r.Start && r.Start < last {
			continue // overlaps one that already counts
		}
		available = max(available, r.Available)
		if !r.Flag.Usable() || math.IsNaN(r.Value) {
			worst = max(worst, r.Flag)
			unusable++
			continue
		}
		last = max(last, r.End)
		usable++
		inside := min(r.End, to) - max(r.Start, from)
		share, weight := 1.0, float64(inside)
		if r.End > r.Start {
			share = float64(inside) / float64(r.End-r.Start)
			covered += inside
		} else {
			instants++
			weight = 1
		}
		sd := r.SD
		if math.IsNaN(sd) {
			variance = math.NaN()
		}
		switch how {
		case quantity.Total:
			sum += r.Value * share
			variance += sd * share * sd * share
		case quantity.Minimum:
			if usable == 1 || r.Value < sum {
				sum, variance = r.Value, sd*sd
			}
		case quantity.Maximum:
			if usable == 1 || r.Value > sum {
				sum, variance = r.Value, sd*sd
			}
		default:
			sum += r.Value * weight
			weights += weight
			variance += sd * weight * sd * weight
		}
		if v.Flag != observation.NotEvaluated {
			v.Flag = r.Flag
		}
	}
	if available > math.MinInt64 {
		v.Available = time.Unix(0, available).UTC()
	}
	if usable == 0 {
		if worst != 0 {
			v.Flag = worst
		}
		return v
	}
	if how == quantity.Mean {
		sum /= weights
		variance /= weights * weights
	}
	v.SD = math.Sqrt(variance)
	v.Value = sum
	if how == quantity.Total && unusable > 0 && covered < to-from {
		v.Flag = observation.Suspect // a part of the total is not known
	}
	if how == quantity.Total && instants == 0 && covered < to-from {
		v.Flag = observation.Suspect // what fell in between is not known
	}
	if expected > 0 {
		seen := float64(covered)/float64(to-from) + float64(instants)*float64(expected)/float64(to-from)
		switch {
		case how == quantity.Total && seen < 0.999, how != quantity.Total && seen < complete:
			v.Flag = observation.Suspect
		}
	}
	return v
}
