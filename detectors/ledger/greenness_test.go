package ledger

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"saprolite/ingest/quantity"
)

func TestGreennessFactor(t *testing.T) {
	nan := quantity.Index(math.NaN())
	for _, c := range []struct {
		name   string
		g, g95 quantity.Index
		want   float64
	}{
		{"as green as ever", 0.6, 0.6, 1},
		{"greener still, a little", 0.62, 0.6, (1 - math.Exp(-2.25*0.62)) / (1 - math.Exp(-2.25*0.6))},
		{"half as green", 0.3, 0.6, (1 - math.Exp(-2.25*0.3)) / (1 - math.Exp(-2.25*0.6))},
		{"bare", 0, 0.6, 0.3},
		{"snow or water", -0.2, 0.6, 0.3},
		{"far above the percentile", 0.9, 0.3, 1.05},
		{"not seen", nan, 0.6, 1},
		{"percentile not known", 0.3, nan, 1},
		{"percentile without meaning", 0.3, 0, 1},
	} {
		if got := GreennessFactor(c.g, c.g95); math.Abs(got-c.want) > 1e-12 {
			t.Errorf("%s: %v, want %v", c.name, got, c.want)
		}
	}
}

func TestGreenerUsesMore(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g95 := quantity.Index(rapid.Float64Range(0.05, 1).Draw(t, "g95"))
		g := quantity.Index(rapid.Float64Range(-0.2, 1).Draw(t, "g"))
		more := g + quantity.Index(rapid.Float64Range(0, 0.5).Draw(t, "more"))
		a, b := GreennessFactor(g, g95), GreennessFactor(more, g95)
		if !(a >= 0.3 && b >= a && b <= 1.05) {
			t.Fatalf("%v at %v, %v at %v", a, float64(g), b, float64(more))
		}
	})
}
