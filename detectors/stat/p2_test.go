package stat

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// The worked example of Jain and Chlamtac 1985, Table I: the median of 20
// observations is estimated as 4.44 (values from memory).
func TestP2WorkedExample(t *testing.T) {
	var p P2
	p.Init(0.5)
	for _, x := range []float64{0.02, 0.15, 0.74, 3.39, 0.83, 22.37, 10.15, 15.43, 38.62, 15.92, 34.60, 10.28, 1.47, 0.40, 0.05, 11.39, 0.27, 0.42, 0.09, 11.37} {
		p.Add(x)
	}
	if v, _ := p.Value(); math.Abs(v-4.44) > 0.005 {
		t.Errorf("median %.4f, want 4.44", v)
	}
}

// Markers stay ordered and within the values seen, whatever comes.
func TestP2Ordered(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var p P2
		p.Init(rapid.Float64Range(0.01, 0.99).Draw(t, "quantile"))
		list := rapid.SliceOfN(rapid.Float64Range(-1, 1), 1, 300).Draw(t, "values")
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, x := range list {
			p.Add(x)
			lo, hi = math.Min(lo, x), math.Max(hi, x)
		}
		v, ok := p.Value()
		if !ok || v < lo || v > hi {
			t.Fatalf("%g outside %g..%g", v, lo, hi)
		}
		for i := 1; p.Count >= 5 && i < 5; i++ {
			if p.Height[i] < p.Height[i-1] || p.Position[i] <= p.Position[i-1] {
				t.Fatalf("markers out of order: %+v", p)
			}
		}
	})
}
