package stat

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

func near(t *testing.T, name string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s: got %.9g, want %.9g (within %g)", name, got, want, tol)
	}
}

// The sample and its numbers are those of the tests of lmoments3, the Python
// port of Hosking's LMOMENTS library.
func TestLMomentsAgainstLmoments3(t *testing.T) {
	sample := []float64{2.0, 3.0, 4.0, 2.4, 5.5, 1.2, 5.4, 2.2, 7.1, 1.3, 1.5}
	before := slices.Clone(sample)
	m := SampleLMoments(sample)
	if !slices.Equal(sample, before) {
		t.Error("the sample was changed")
	}
	near(t, "L1", m.L1, 3.2363636, 5e-8)
	near(t, "L2", m.L2, 1.1418182, 5e-8)
	near(t, "T3", m.T3, 0.27388535, 5e-9)
	g := m.Gumbel()
	near(t, "mu", g.Mu, 2.285519, 1e-6)
	near(t, "beta", g.Beta, 1.647295, 1e-6)
	near(t, "quantile 0.2", g.Quantile(0.2), 1.501596, 1e-6)
	near(t, "quantile 0.5", g.Quantile(0.5), 2.889274, 1e-6)
	near(t, "quantile 0.8", g.Quantile(0.8), 4.756363, 1e-6)
}

// Uccle (Belgium), largest rain of a day in each year 1938-1972, mm (Sneyers
// 1977, as in the R package evd); the expected numbers are those of
// testdata/uccle.py.
func TestGumbelUccle(t *testing.T) {
	g := SampleLMoments([]float64{33.8, 27.7, 60.0, 24.0, 72.3, 50.7, 18.7, 41.2, 26.6, 27.2, 23.8, 19.8,
		34.3, 28.2, 51.1, 37.5, 34.3, 22.2, 35.6, 34.2, 24.3, 20.3, 48.0, 32.4, 59.6, 60.4, 27.0, 45.8,
		39.8, 21.6, 19.7, 54.4, 29.1, 41.6, 26.0}).Gumbel()
	near(t, "mu", g.Mu, 29.317852, 1e-6)
	near(t, "beta", g.Beta, 11.239928, 1e-6)
	for _, c := range []struct{ years, want float64 }{
		{2, 33.4374}, {10, 54.6118}, {20, 62.7026}, {50, 73.1754}, {100, 81.0232},
	} {
		near(t, "return level", ReturnLevel(g, c.years), c.want, 5e-5)
	}
}

// The reduced variate as tabulated in hydrology (Gumbel 1958), and with it the
// frequency factor K = (sqrt 6/pi)(y - 0.5772) of Chow, Maidment and Mays
// 1988, Applied Hydrology, chapter 12 (printed values from memory).
func TestReducedVariate(t *testing.T) {
	for _, c := range []struct{ years, y, k float64 }{
		{2, 0.36651, -0.164}, {5, 1.49994, 0.719}, {10, 2.25037, 1.305}, {20, 2.97020, 1.866},
		{25, 3.19853, 2.044}, {50, 3.90194, 2.592}, {100, 4.60015, 3.137}, {200, 5.29581, 3.679},
	} {
		y := ReducedVariate(c.years)
		near(t, "y", y, c.y, 6e-6)
		near(t, "K", math.Sqrt(6)/math.Pi*(y-0.5772), c.k, 6e-4)
	}
}

// Two textbook fits by moments, brought here by the L2 that a Gumbel
// distribution of that standard deviation has (sd = beta pi/sqrt 6).
func TestGumbelTextbooks(t *testing.T) {
	fit := func(mean, sd float64) LMoments {
		return LMoments{L1: mean, L2: sd * math.Sqrt(6) / math.Pi * math.Ln2}
	}
	// Chow, Maidment and Mays 1988, example 12.2.1: rain of 10 minutes at
	// Chicago, inches (printed values from memory).
	chicago := fit(0.649, 0.177).Gumbel()
	near(t, "Chicago mu", chicago.Mu, 0.569, 0.0005)
	near(t, "Chicago beta", chicago.Beta, 0.138, 0.0005)
	for _, c := range []struct{ years, want float64 }{{5, 0.78}, {10, 0.88}, {50, 1.11}} {
		near(t, "Chicago return level", ReturnLevel(chicago, c.years), c.want, 0.005)
	}
	// Cornell CEE 304, section of 10-11 October 2006, problem 1: rain of 24
	// hours in Vermont, inches; its alpha is 1/beta.
	vermont := fit(2.5, 0.7).Gumbel()
	near(t, "Vermont alpha", 1/vermont.Beta, 1.832, 0.0005)
	near(t, "Vermont mu", vermont.Mu, 2.185, 0.0005)
	near(t, "Vermont 50 years", ReturnLevel(vermont, 50), 4.315, 0.0005)
}

func TestTooShortSamples(t *testing.T) {
	if m := SampleLMoments(nil); !math.IsNaN(m.L1) || !math.IsNaN(m.L2) || !math.IsNaN(m.T3) {
		t.Errorf("no value: %+v", m)
	}
	if m := SampleLMoments([]float64{3}); m.L1 != 3 || !math.IsNaN(m.L2) || !math.IsNaN(m.T3) {
		t.Errorf("one value: %+v", m)
	}
	// Two values: L2 is half their difference.
	if m := SampleLMoments([]float64{7, 3}); m.L1 != 5 || m.L2 != 2 || !math.IsNaN(m.T3) {
		t.Errorf("two values: %+v", m)
	}
	if m := SampleLMoments([]float64{7, math.NaN(), 3}); !math.IsNaN(m.L1) || !math.IsNaN(m.L2) {
		t.Errorf("a missing value: %+v", m)
	}
}

func TestEqualValues(t *testing.T) {
	m := SampleLMoments(slices.Repeat([]float64{0.1}, 7))
	g := m.Gumbel()
	if m.L2 != 0 || g.Beta != 0 || g.Mu != 0.1 || ReturnLevel(g, 20) != 0.1 {
		t.Errorf("%+v, Gumbel %v %v", m, g.Mu, g.Beta)
	}
	if Exceedance(g, 0.09) != 1 || Exceedance(g, 0.1) != 0 || Exceedance(g, 0.2) != 0 {
		t.Error("every year reaches 0.1 and none passes it")
	}
}

// L-moments by their definition: means over all pairs and triples of the
// sample (Hosking 1990, equation 2.1, as U-statistics), and order and unit do
// not matter.
func TestLMomentsByDefinition(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.SliceOfN(rapid.Float64Range(0, 1000), 3, 12).Draw(t, "sample")
		m := SampleLMoments(x)
		s := slices.Sorted(slices.Values(x))
		var l2, l3, pairs, triples float64
		for i := range s {
			for j := range i {
				l2 += (s[i] - s[j]) / 2
				pairs++
				for k := range j {
					l3 += (s[i] - 2*s[j] + s[k]) / 3
					triples++
				}
			}
		}
		if math.Abs(m.L2-l2/pairs) > 1e-9 || math.Abs(m.T3*m.L2-l3/triples) > 1e-9 {
			// T3 is NaN, and rightly, when all values are alike.
			if m.L2 != 0 || l2 != 0 {
				t.Fatalf("L2 %v, by pairs %v; L3 %v, by triples %v", m.L2, l2/pairs, m.T3*m.L2, l3/triples)
			}
		}
		y := slices.Clone(x)
		for i := range y {
			y[i] = 2*y[i] + 10
		}
		slices.Reverse(y)
		a, b := ReturnLevel(m.Gumbel(), 20), ReturnLevel(SampleLMoments(y).Gumbel(), 20)
		if math.Abs(b-(2*a+10)) > 1e-9*math.Abs(b) {
			t.Fatalf("return level %v became %v", a, b)
		}
	})
}

// A level is passed once in the years it was computed for.
func TestExceedanceInvertsReturnLevel(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g := LMoments{
			L1: rapid.Float64Range(0, 1000).Draw(t, "L1"), L2: rapid.Float64Range(0.1, 300).Draw(t, "L2"),
		}.Gumbel()
		years := rapid.Float64Range(1.1, 500).Draw(t, "years")
		if p := Exceedance(g, ReturnLevel(g, years)); math.Abs(p*years-1) > 1e-6 {
			t.Fatalf("the %v-year level is passed with chance %v", years, p)
		}
	})
}
