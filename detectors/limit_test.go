package detectors

import "testing"

// What the limit says of a young stand does not change within a hydrological
// year, by a restore or by going back in it.
func TestLimitIsTheSameAfterARestore(t *testing.T) {
	opts := options()
	opts.YearStart, opts.Established = 182, 2026 // ten years old within a hydrological year
	s := New(opts, firstDay)
	for s.State.Day < firstDay+5*365+90 { // into 2036
		in := season(s.State.Day+1, 3)
		s.Step(&in)
		if s.State.Day%45 != 0 {
			continue
		}
		restored, err := Restore(opts, decodeHead(t, headBytes(t, s)))
		if err != nil {
			t.Fatal(err)
		}
		if got, want := restored.Limit().Basis, s.Limit().Basis; got != want {
			t.Errorf("%s: after a restore %q, was %q", s.State.Day, got, want)
		}
		restored.Rewind(s.State.Day)
		in = season(s.State.Day, 3)
		restored.Step(&in)
		if got, want := restored.Limit().Basis, s.Limit().Basis; got != want {
			t.Errorf("%s: settled again %q, was %q", s.State.Day, got, want)
		}
	}
	if want := "unknown: roots still deepening, planted 2026"; s.Limit().Basis != want {
		t.Errorf("limit %q, want %q", s.Limit().Basis, want)
	}
}
