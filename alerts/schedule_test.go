package alerts

import (
	"testing"
	"time"

	"pgregory.net/rapid"
)

// The wait of any id and attempt lies within the stated shares of the
// schedule's delay, is the same every time, and never exceeds longest.
func TestJitterStaysWithinItsShares(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s := Schedule{
			Delays: []time.Duration{0, time.Duration(rapid.Int64Range(0, int64(24*time.Hour)).Draw(t, "delay"))},
			Early:  rapid.Float64Range(0, 1).Draw(t, "early"),
			Late:   rapid.Float64Range(0, 1).Draw(t, "late"),
		}
		id := rapid.String().Draw(t, "id")
		got, ok := s.after(id, 1)
		again, _ := s.after(id, 1)
		d := float64(s.Delays[1])
		switch {
		case !ok:
			t.Fatal("no second attempt")
		case got != again:
			t.Fatalf("two waits for one attempt: %v and %v", got, again)
		// One nanosecond: the rounding of a Duration.
		case float64(got) < d*(1-s.Early)-1 || float64(got) > d*(1+s.Late)+1:
			t.Fatalf("wait %v is outside the shares", got)
		case got > s.longest()+1:
			t.Fatalf("wait %v exceeds longest %v", got, s.longest())
		}
		if _, ok := s.after(id, 2); ok {
			t.Fatal("an attempt beyond the last delay")
		}
	})
}

// Over many ids the jitter of +-20 % has its mean at the delay itself and
// reaches into both outer quarters: it is spread, not constant. With 2,000
// draws from a uniform of half-width 0.2 the mean's standard error is
// 0.2/sqrt(3*2000) = 0.0026; five of them are allowed.
func TestJitterIsSpread(t *testing.T) {
	s := WebhookSchedule()
	var sum, low, high float64
	low = 2
	const n = 2000
	for i := range n {
		w, _ := s.after(time.Unix(int64(i), 0).String(), 4)
		share := float64(w) / float64(2*time.Hour)
		sum += share
		low, high = min(low, share), max(high, share)
	}
	if mean := sum / n; mean < 1-5*0.0026 || mean > 1+5*0.0026 {
		t.Errorf("mean share %v, want 1", mean)
	}
	if low > 0.85 || high < 1.15 {
		t.Errorf("shares from %v to %v, want about 0.8 to 1.2", low, high)
	}
}
