package ledger

import (
	"encoding/csv"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

func TestLimitNeedsFiveYears(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		maxima []float64
		basis  string
	}{
		{nil, "unknown: 0 complete years of annual maxima, needs 5"},
		{[]float64{400}, "unknown: 1 complete year of annual maxima, needs 5"},
		{[]float64{443.3, 432.2, 475.3, 562.7}, "unknown: 4 complete years of annual maxima, needs 5"},
		{[]float64{443.3, nan, 432.2, 475.3, 562.7}, "unknown: 4 complete years of annual maxima, needs 5"},
	} {
		l := LimitFromMaxima(c.maxima)
		if l.Known() || l.Basis != c.basis || !math.IsNaN(float64(l.Low)) || !math.IsNaN(float64(l.High)) {
			t.Errorf("%v: %+v", c.maxima, l)
		}
	}
}

// Uccle's yearly maxima of rain, as in the stat package's tests, where the data
// and the 20-year level have their source.
func TestLimitUccle(t *testing.T) {
	l := LimitFromMaxima([]float64{33.8, 27.7, 60.0, 24.0, 72.3, 50.7, 18.7, 41.2, 26.6, 27.2, 23.8, 19.8,
		34.3, 28.2, 51.1, 37.5, 34.3, 22.2, 35.6, 34.2, 24.3, 20.3, 48.0, 32.4, 59.6, 60.4, 27.0, 45.8,
		39.8, 21.6, 19.7, 54.4, 29.1, 41.6, 26.0})
	if math.Abs(float64(l.Value)-62.7026) > 5e-5 {
		t.Errorf("20-year level %v, want 62.7026", float64(l.Value))
	}
	if l.Basis != "once-in-20-years deficit from 35 complete years" {
		t.Errorf("basis %q", l.Basis)
	}
	if !(l.Low < l.Value && l.Value < l.High) {
		t.Errorf("interval %v to %v", l.Low, l.High)
	}
}

func TestLimitOfEqualMaxima(t *testing.T) {
	l := LimitFromMaxima([]float64{250.1, 250.1, 250.1, 250.1, 250.1, 250.1})
	if l.Value != 250.1 || l.Low != 250.1 || l.High != 250.1 {
		t.Errorf("%v, %v to %v; every year reached exactly 250.1", l.Value, l.Low, l.High)
	}
}

func TestLimitProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		maxima := rapid.SliceOfN(rapid.Float64Range(0, 900), 5, 150).Draw(t, "maxima")
		l := LimitFromMaxima(maxima)
		if !(l.Low >= 0 && l.Low <= l.Value && l.Value <= l.High) {
			t.Fatalf("%v, %v to %v", float64(l.Value), float64(l.Low), float64(l.High))
		}
		double := make([]float64, len(maxima))
		for i, m := range maxima {
			double[len(maxima)-1-i] = 2 * m
		}
		d := LimitFromMaxima(double)
		for _, pair := range [][2]float64{
			{float64(l.Value), float64(d.Value)}, {float64(l.Low), float64(d.Low)}, {float64(l.High), float64(d.High)},
		} {
			if math.Abs(pair[1]-2*pair[0]) > 1e-9*(1+pair[1]) {
				t.Fatalf("%v, of doubled maxima %v", pair[0], pair[1])
			}
		}
	})
}

// The table in the code is the one that testdata/pivot.go made.
func TestPivotTableIsTheGeneratedOne(t *testing.T) {
	text, err := os.ReadFile("testdata/pivot.csv")
	if err != nil {
		t.Fatal(err)
	}
	rows, err := csv.NewReader(strings.NewReader(string(text))).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != len(pivots)+1 {
		t.Fatalf("%d rows made, %d in the code", len(rows)-1, len(pivots))
	}
	for i, row := range rows[1:] {
		for k, want := range []float64{pivots[i].n, pivots[i].z05, pivots[i].z95} {
			if v, err := strconv.ParseFloat(row[k], 64); err != nil || v != want {
				t.Errorf("row %d, %s: %s made, %v in the code", i, rows[0][k], row[k], want)
			}
		}
	}
}

// The interval holds the true level in 90 % of samples, and misses on each
// side in 5 %: at a row of the table, between rows, and with the most the
// table is stretched in between. True maxima have mean 300 mm and a
// coefficient of variation of 0.25, so that no low bound is cut at 0.
func TestIntervalCoverage(t *testing.T) {
	const samples = 20000
	// 4 standard errors of a 5 % share in so many samples.
	tolerance := 4 * math.Sqrt(0.05*0.95/samples)
	beta := 300 * 0.25 * math.Sqrt(6) / math.Pi
	mu := 300 - 0.57721566*beta
	truth := mu - beta*math.Log(-math.Log(0.95))
	for _, n := range []int{5, 6, 11, 17, 22, 50, 80} {
		r := rand.New(rand.NewPCG(7, uint64(n)))
		maxima := make([]float64, n)
		var above, below float64
		for range samples {
			for i := range maxima {
				maxima[i] = mu - beta*math.Log(r.ExpFloat64())
			}
			l := LimitFromMaxima(maxima)
			if float64(l.Low) > truth {
				above += 1. / samples
			}
			if float64(l.High) < truth {
				below += 1. / samples
			}
		}
		if math.Abs(above-0.05) > tolerance || math.Abs(below-0.05) > tolerance {
			t.Errorf("%d years: the truth lies below the interval in %.4f and above it in %.4f of samples, want 0.05 each (within %.4f)",
				n, above, below, tolerance)
		}
	}
}

// With more years than the table has, the interval is too wide, never too
// narrow.
func TestPivotBeyondTheTable(t *testing.T) {
	low, high := pivot(100)
	if l, h := pivot(400); l != low || h != high {
		t.Errorf("at 400 years %v %v, at 100 %v %v", l, h, low, high)
	}
	for n := MinimumYears; n < 130; n++ {
		l0, h0 := pivot(n)
		l1, h1 := pivot(n + 1)
		if l1 < l0 || h1 > h0 {
			t.Errorf("the interval widens from %d to %d years", n, n+1)
		}
	}
}
