package config

import (
	"os"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// TestCoverage holds what is said of each stand of an invented forest against
// a text written beside it.
func TestCoverage(t *testing.T) {
	r := load(t, "testdata/coverage.good.geojson")
	var b strings.Builder
	for i := range r.Stands {
		b.WriteString(r.Coverage(&r.Stands[i]).String())
	}
	const file = "testdata/coverage.good.geojson.want"
	if *update {
		if err := os.WriteFile(file, []byte(b.String()), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(string(want), b.String()); diff != "" {
		t.Errorf("-want +got:\n%s", diff)
	}
}
