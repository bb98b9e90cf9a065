package daybook

import (
	"bytes"
	"slices"
	"testing"
	"time"

	"pgregory.net/rapid"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// A save that breaks off between any two of its parts loses nothing: with the
// observations since the save before added again, the book is what it would
// have been.
func TestBrokenOffSaveIsMended(t *testing.T) {
	reading := rapid.Custom(func(t *rapid.T) observation.Observation {
		start := quantity.DateOf(2031, time.December, 30).Start(0).Add(time.Duration(rapid.IntRange(0, 16).Draw(t, "quarter day")) * 6 * time.Hour)
		return observation.Observation{
			Source: "gauge", Quantity: quantity.Precipitation, Start: start,
			End:   start.Add(time.Duration(rapid.SampledFrom([]int{6, 24, 24}).Draw(t, "hours")) * time.Hour),
			Value: float64(rapid.IntRange(0, 9).Draw(t, "mm")), SD: nan, Flag: observation.Pass,
			Available: start.Add(time.Duration(rapid.IntRange(1, 3).Draw(t, "days")) * 24 * time.Hour),
		}
	})
	rapid.Check(t, func(t *rapid.T) {
		list := rapid.SliceOfN(reading, 2, 12).Draw(t, "readings")
		saved := rapid.IntRange(0, len(list)).Draw(t, "saved after")
		add := func(b *Book, list []observation.Observation) {
			for _, o := range list {
				if _, err := b.Add(o); err != nil {
					t.Fatal(err)
				}
			}
		}
		want, got := shelf{}, shelf{}
		straight := open(t, Options{Source: "gauge", Shelf: want})
		add(straight, list)
		want.put(t, straight)

		b := open(t, Options{Source: "gauge", Shelf: got})
		add(b, list[:saved])
		got.put(t, b)
		add(b, list[saved:])
		entries, err := b.Changed()
		if err != nil {
			t.Fatal(err)
		}
		for _, e := range entries[:rapid.IntRange(0, len(entries)).Draw(t, "parts written")] {
			got[e.Key] = e.Data
		}
		b = open(t, Options{Source: "gauge", Shelf: got})
		add(b, list[saved:])
		got.put(t, b)
		if len(want) != len(got) {
			t.Fatalf("parts %v, want %v", keys(got), keys(want))
		}
		for key, data := range want {
			if !bytes.Equal(got[key], data) {
				t.Fatalf("%s differs", key)
			}
		}
	})
}

func keys(s shelf) []string {
	var list []string
	for key := range s {
		list = append(list, key)
	}
	slices.Sort(list)
	return list
}
