package ledger

import (
	"math"
	"testing"

	"github.com/fxamacker/cbor/v2"
	"gonum.org/v1/gonum/floats"
	"pgregory.net/rapid"

	"saprolite/ingest/quantity"
)

type mm = quantity.Millimetres

var unknown = mm(math.NaN())

// modelled and given are days as tests write them.
func modelled(rain, reference mm, coefficient float64) Input {
	return Input{Rain: rain, ReferenceET: reference, Coefficient: coefficient, GivenET: unknown}
}

func given(rain, et mm) Input {
	return Input{Rain: rain, ReferenceET: unknown, Coefficient: math.NaN(), GivenET: et}
}

// draw draws a number as data have it, with three decimals; numbers like 1e-300
// would test float64 and not the account.
func draw(t *rapid.T, least, most int, name string) float64 {
	return float64(rapid.IntRange(least*1000, most*1000).Draw(t, name)) / 1000
}

// drawParams draws stores from far too small to never short.
func drawParams(t *rapid.T) *Params {
	p := &Params{
		CanopyStore: mm(draw(t, 0, 4, "canopy store")),
		Capacity:    mm(draw(t, 1, 800, "capacity")),
		StressAt:    draw(t, 0, 1, "stress at"),
	}
	if rapid.IntRange(0, 4).Draw(t, "never short") == 0 {
		p.Capacity = unknown
	}
	return p
}

// drawDays draws a spell of wet and dry days; kind picks what is known of
// evapotranspiration.
type kind int

const (
	onlyModelled kind = iota
	onlyGiven
	both
)

func drawDays(t *rapid.T, k kind, most int) []Input {
	one := rapid.Custom(func(t *rapid.T) Input {
		in := modelled(0, mm(draw(t, 0, 12, "reference")), draw(t, 0, 2, "coefficient"))
		if rapid.IntRange(0, 2).Draw(t, "wet") == 0 {
			in.Rain = mm(draw(t, 0, 120, "rain"))
		}
		if k == onlyGiven || k == both && rapid.Bool().Draw(t, "given") {
			in.GivenET = mm(draw(t, -1, 10, "given ET"))
			if rapid.Bool().Draw(t, "no reference") {
				in.ReferenceET, in.Coefficient = unknown, math.NaN()
			}
		}
		return in
	})
	return rapid.SliceOfN(one, 1, most).Draw(t, "days")
}

// run returns the deficit at the end of each day.
func run(s Store, days []Input, p *Params) []mm {
	out := make([]mm, len(days))
	for i, in := range days {
		s.Day(in, p)
		out[i] = s.Deficit
	}
	return out
}

// One day by hand (the order of Store.Day, no publication): 5 mm of rain on a
// canopy that has room for 1 of its 1.5 mm.
func TestDayStepByStep(t *testing.T) {
	s := Store{Deficit: 60, Canopy: 0.5}
	p := &Params{CanopyStore: 1.5, Capacity: 100, StressAt: 0.5}
	f := s.Day(modelled(5, 4, 0.75), p)
	// Canopy 1.5 mm dries within the 4 mm of the reference; 3 - 1.5 = 1.5 mm are
	// left to draw; 40 mm left of 50 where stress begins: x 0.8 = 1.2 mm.
	want := Flux{Input: 4, Interception: 1.5, ActualET: 2.7, Stress: 0.8}
	if math.Abs(float64(f.ActualET-want.ActualET)) > 1e-12 || f.Input != want.Input ||
		f.Interception != want.Interception || f.Overflow != 0 || f.Stress != want.Stress {
		t.Errorf("got %+v, want %+v", f, want)
	}
	if math.Abs(float64(s.Deficit-57.2)) > 1e-12 || s.Canopy != 0 {
		t.Errorf("got %+v, want a deficit of 60 + 1.2 - 4 = 57.2 mm and a dry canopy", s)
	}
}

func TestDayCases(t *testing.T) {
	none := &Params{Capacity: unknown, StressAt: 0.5}
	canopy := &Params{CanopyStore: 2, Capacity: unknown, StressAt: 0.5}
	hundred := &Params{Capacity: 100, StressAt: 0.5}
	for _, c := range []struct {
		name   string
		start  Store
		in     Input
		p      *Params
		end    Store
		actual mm
		over   mm
		gone   mm // discarded
		stress float64
	}{
		{"rain on a full store overflows", Store{}, modelled(10, 4, 1), none, Store{}, 4, 6, 0, 1},
		{"a dry day draws", Store{Deficit: 7}, modelled(0, 4, 0.5), none, Store{Deficit: 9}, 2, 0, 0, 1},
		{"never short without a capacity", Store{Deficit: 5000}, modelled(0, 4, 1), none, Store{Deficit: 5004}, 4, 0, 0, 1},
		{"given water use has no stress on top", Store{Deficit: 99}, given(0, 4), hundred, Store{Deficit: 103}, 4, 0, 0, math.NaN()},
		{"dew counts as none and is told", Store{Deficit: 7}, given(0, -0.25), none, Store{Deficit: 7}, 0, 0, 0.25, math.NaN()},
		{"the canopy wins over a smaller given value", Store{Deficit: 7, Canopy: 2}, Input{Rain: 0, ReferenceET: 1.5, GivenET: 1, Coefficient: 1}, canopy, Store{Deficit: 7, Canopy: 0.5}, 1.5, 0, 0, math.NaN()},
		{"without a reference the given value dries the canopy", Store{Deficit: 7, Canopy: 2}, given(0, 1), canopy, Store{Deficit: 7, Canopy: 1}, 1, 0, 0, math.NaN()},
		{"canopy evaporation is part of the given value", Store{Deficit: 7, Canopy: 2}, given(0, 5), canopy, Store{Deficit: 10}, 5, 0, 0, math.NaN()},
		{"half the stressed part left: half the demand", Store{Deficit: 75}, modelled(0, 4, 1), hundred, Store{Deficit: 77}, 2, 0, 0, 0.5},
		{"an empty store gives nothing", Store{Deficit: 100}, modelled(0, 4, 1), hundred, Store{Deficit: 100}, 0, 0, 0, 0},
		{"a measured deficit past the capacity is kept", Store{Deficit: 130}, modelled(0, 4, 1), hundred, Store{Deficit: 130}, 0, 0, 0, 0},
		{"and refilled by rain", Store{Deficit: 130}, modelled(20, 4, 1), hundred, Store{Deficit: 110}, 0, 0, 0, 0},
		{"no more is drawn than is left", Store{Deficit: 2}, modelled(0, 9, 1), &Params{Capacity: 8, StressAt: 0.9}, Store{Deficit: 8}, 6, 0, 0, 1},
	} {
		s := c.start
		f := s.Day(c.in, c.p)
		stress := f.Stress == c.stress || math.IsNaN(f.Stress) && math.IsNaN(c.stress)
		if s != c.end || f.ActualET != c.actual || f.Overflow != c.over || f.Discarded != c.gone || !stress {
			t.Errorf("%s: %+v and %+v", c.name, s, f)
		}
	}
}

// Anything unknown leaves the account as it was: missing is not zero.
func TestUnknownDayStandsStill(t *testing.T) {
	for name, in := range map[string]Input{
		"rain":                      modelled(unknown, 4, 1),
		"reference":                 modelled(3, unknown, 1),
		"coefficient":               modelled(3, 4, math.NaN()),
		"rain, with a measured use": given(unknown, 3),
		"rain below 0":              modelled(-1, 4, 1),
		"reference below 0":         modelled(3, -4, 1),
		"everything":                given(unknown, unknown),
	} {
		start := Store{Deficit: 40, Canopy: 1}
		s := start
		f := s.Day(in, &Params{CanopyStore: 1.5, Capacity: 100, StressAt: 0.5})
		if s != start || !math.IsNaN(float64(f.Input)) || !math.IsNaN(float64(f.ActualET)) || !math.IsNaN(float64(f.Overflow)) {
			t.Errorf("unknown %s: %+v and %+v", name, s, f)
		}
	}
}

// The running deficit of Wang-Erlandsson et al. 2016 worked by hand on twelve
// days.
func TestRunningDeficit(t *testing.T) {
	rain := []mm{0, 12, 0, 0, 3, 0, 0, 25, 0, 0, 0, 0}
	et := []mm{3, 2, 4, 4, 3, 5, 4, 2, 3, 4, 4, 3}
	want := []mm{3, 0, 4, 8, 8, 13, 17, 0, 3, 7, 11, 14}
	var s Store
	for i := range rain {
		s.Day(given(rain[i], et[i]), &Params{Capacity: unknown})
		if s.Deficit != want[i] {
			t.Errorf("day %d: deficit %v, want %v", i+1, s.Deficit, want[i])
		}
	}
}

// The same deficit seen as a mass curve (Gao et al. 2014): how far the sum of
// rain less evapotranspiration lies below the highest it has been.
func TestDeficitIsTheMassCurve(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		days := drawDays(t, onlyGiven, 300)
		var sum, highest mm
		for i, d := range run(Store{}, days, &Params{Capacity: 50, StressAt: 0.5}) {
			sum += days[i].Rain - max(0, days[i].GivenET)
			highest = max(highest, sum)
			if math.Abs(float64(highest-sum-d)) > 1e-9 {
				t.Fatalf("day %d: deficit %v, mass curve %v", i, float64(d), float64(highest-sum))
			}
		}
	})
}

func TestWaterIsConservedAndBounded(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, days := drawParams(t), drawDays(t, both, 300)
		var s Store
		for i, in := range days {
			before := s
			f := s.Day(in, p)
			canopy := in.Rain - f.Input - f.Interception - (s.Canopy - before.Canopy)
			root := f.Input + f.Interception - f.ActualET - f.Overflow + (s.Deficit - before.Deficit)
			if math.Abs(float64(canopy)) > 1e-9 || math.Abs(float64(root)) > 1e-9 {
				t.Fatalf("day %d: %v mm lost in the canopy, %v below it", i, float64(canopy), float64(root))
			}
			for name, v := range map[string]mm{
				"deficit": s.Deficit, "canopy": s.Canopy, "input": f.Input, "interception": f.Interception,
				"actual ET": f.ActualET, "overflow": f.Overflow, "root zone's ET": f.ActualET - f.Interception + 1e-12,
				"discarded": f.Discarded, "room in the canopy": p.CanopyStore - s.Canopy + 1e-12,
			} {
				if !(v >= 0) {
					t.Fatalf("day %d: %s %v", i, name, float64(v))
				}
			}
			if f.Overflow > 0 && s.Deficit > 0 {
				t.Fatalf("day %d: overflow %v over a deficit of %v", i, f.Overflow, s.Deficit)
			}
			if s.Deficit > before.Deficit && math.IsNaN(float64(in.GivenET)) && s.Deficit > p.Capacity {
				t.Fatalf("day %d: modelled deficit %v past the capacity %v", i, s.Deficit, p.Capacity)
			}
			if !math.IsNaN(f.Stress) && !(f.Stress >= 0 && f.Stress <= 1) {
				t.Fatalf("day %d: stress %v", i, f.Stress)
			}
		}
	})
}

// Forty years of days in a row still close. The sums are compensated, so that
// what is left is the account's own rounding.
func TestWaterIsConservedOverFortyYears(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, season := drawParams(t), drawDays(t, both, 365)
		var s Store
		var flows []float64
		for i := range 40*365 + 10 {
			in := season[i%len(season)]
			f := s.Day(in, p)
			flows = append(flows, float64(in.Rain), -float64(f.ActualET), -float64(f.Overflow))
		}
		flows = append(flows, float64(s.Deficit), -float64(s.Canopy))
		if lost := floats.SumCompensated(flows); math.Abs(lost) > 1e-6 {
			t.Fatalf("%v mm lost", lost)
		}
	})
}

func TestMoreRainNeverRaisesALaterDeficit(t *testing.T) {
	for k, name := range map[kind]string{onlyModelled: "modelled", onlyGiven: "given", both: "both"} {
		t.Run(name, rapid.MakeCheck(func(t *rapid.T) {
			p, days := drawParams(t), drawDays(t, k, 120)
			start := Store{Deficit: mm(draw(t, 0, 300, "deficit"))}
			wetter := append([]Input(nil), days...)
			wetter[rapid.IntRange(0, len(days)-1).Draw(t, "when")].Rain += mm(draw(t, 0, 60, "more"))
			a, b := run(start, days, p), run(start, wetter, p)
			for i := range a {
				if b[i] > a[i]+1e-9 {
					t.Fatalf("day %d: %v after more rain, %v without", i, float64(b[i]), float64(a[i]))
				}
			}
		}))
	}
}

func TestMoreGivenUseNeverLowersALaterDeficit(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, days := drawParams(t), drawDays(t, onlyGiven, 120)
		thirstier := append([]Input(nil), days...)
		thirstier[rapid.IntRange(0, len(days)-1).Draw(t, "when")].GivenET += mm(draw(t, 0, 5, "more"))
		a, b := run(Store{}, days, p), run(Store{}, thirstier, p)
		for i := range a {
			if b[i] < a[i]-1e-9 {
				t.Fatalf("day %d: %v after more use, %v without", i, float64(b[i]), float64(a[i]))
			}
		}
	})
}

// Two accounts that begin apart never move further apart.
func TestDifferentStartsConverge(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, days := drawParams(t), drawDays(t, both, 200)
		a := Store{Deficit: mm(draw(t, 0, 300, "one"))}
		b := Store{Deficit: mm(draw(t, 0, 300, "other"))}
		apart := math.Abs(float64(a.Deficit - b.Deficit))
		for i, in := range days {
			a.Day(in, p)
			b.Day(in, p)
			now := math.Abs(float64(a.Deficit - b.Deficit))
			if now > apart+1e-9 {
				t.Fatalf("day %d: %v apart, %v the day before", i, now, apart)
			}
			apart = now
		}
	})
}

// Twice everything in mm is twice the deficit, to the bit: no millimetre is
// hidden in the code.
func TestScaling(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, days := drawParams(t), drawDays(t, both, 200)
		twice := &Params{CanopyStore: 2 * p.CanopyStore, Capacity: 2 * p.Capacity, StressAt: p.StressAt}
		doubled := make([]Input, len(days))
		for i, in := range days {
			doubled[i] = Input{Rain: 2 * in.Rain, ReferenceET: 2 * in.ReferenceET, Coefficient: in.Coefficient, GivenET: 2 * in.GivenET}
		}
		start := mm(draw(t, 0, 300, "deficit"))
		a, b := run(Store{Deficit: start}, days, p), run(Store{Deficit: 2 * start}, doubled, twice)
		for i := range a {
			if b[i] != 2*a[i] {
				t.Fatalf("day %d: %v and %v", i, float64(a[i]), float64(b[i]))
			}
		}
	})
}

// Written away and read back on any day, the account goes on to the same bits.
func TestSplitAndResume(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, days := drawParams(t), drawDays(t, both, 120)
		cut := rapid.IntRange(0, len(days)).Draw(t, "cut")
		var straight, first, resumed Store
		for _, in := range days {
			straight.Day(in, p)
		}
		for _, in := range days[:cut] {
			first.Day(in, p)
		}
		stored, err := cbor.Marshal(first)
		if err != nil {
			t.Fatal(err)
		}
		if err := cbor.Unmarshal(stored, &resumed); err != nil {
			t.Fatal(err)
		}
		for _, in := range days[cut:] {
			resumed.Day(in, p)
		}
		if resumed != straight {
			t.Fatalf("%+v, straight through %+v", resumed, straight)
		}
	})
}

func TestDayDoesNotAllocate(t *testing.T) {
	s, p := Store{}, &Params{CanopyStore: 1.5, Capacity: 200, StressAt: 0.5}
	dry, wet, still := modelled(0, 4, 0.85), given(20, 3), modelled(unknown, 4, 1)
	if n := testing.AllocsPerRun(100, func() {
		s.Day(dry, p)
		s.Day(wet, p)
		s.Day(still, p)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func BenchmarkStoreDay(b *testing.B) {
	s, p := Store{}, &Params{CanopyStore: 1.5, Capacity: 200, StressAt: 0.5}
	days := [...]Input{modelled(0, 4, 0.85), modelled(12, 2, 0.85), modelled(0, 5, 0.85), given(0, 3)}
	b.ReportAllocs()
	for i := 0; b.Loop(); i++ {
		s.Day(days[i%len(days)], p)
	}
}
