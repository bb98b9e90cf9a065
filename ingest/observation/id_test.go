package observation

import (
	"regexp"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// Design 5.1, as it is written there.
var id51 = regexp.MustCompile(`^[a-z0-9][a-z0-9_-]{0,63}$`)

func TestValidIDIsDesign51(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s := rapid.OneOf(rapid.String(), rapid.StringMatching(`[a-z0-9_-]{0,70}`)).Draw(t, "id")
		if err := ValidID(s); (err == nil) != (id51.MatchString(s) && !strings.HasSuffix(s, "\n")) {
			t.Fatalf("ValidID(%q) = %v", s, err)
		}
	})
	for _, s := range []string{"", "-a", "_a", "A", "a.b", "a/../b", "a*", "a>", "a b", "a\n", "é", "\xff", strings.Repeat("a", 65), strings.Repeat("é", 10_000)} {
		if err := ValidID(s); err == nil || len(err.Error()) > 200 {
			t.Errorf("ValidID(%.20q) = %v, want a short error", s, err)
		}
	}
}
