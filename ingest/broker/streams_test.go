package broker

import (
	"strings"
	"testing"

	"github.com/nats-io/nats.go/jetstream"
)

func TestStreamsAreSetUpAndKept(t *testing.T) {
	o := small(t)
	b := open(t, o)
	for range 2 {
		for name, want := range map[string]struct {
			atomic   bool
			max      int64
			discard  jetstream.DiscardPolicy
			subjects string
		}{
			Observations: {true, 128 * mib, jetstream.DiscardNew, "obs.>,clock.>"},
			Held:         {false, 256 * mib / 20, jetstream.DiscardOld, "held.>"},
			Alerts:       {false, -1, jetstream.DiscardNew, "alert.>"},
			BooksStream:  {true, 256 * mib / 20 * 7, jetstream.DiscardNew, "$KV.BOOKS.>"},
		} {
			info, err := b.info(t.Context(), name)
			if err != nil {
				t.Fatal(err)
			}
			c := info.Config
			near := c.MaxBytes == want.max || want.max > 0 && want.max-c.MaxBytes < 20 // shares are whole twentieths
			if c.AllowAtomicPublish != want.atomic || !near || c.Discard != want.discard || strings.Join(c.Subjects, ",") != want.subjects {
				t.Errorf("%s: %+v", name, c)
			}
		}
		shut(t, b)
		b = open(t, o)
	}
}

func TestStoreGrowsAndShrinks(t *testing.T) {
	o := small(t)
	for _, size := range []int64{256 * mib, 1024 * mib, 128 * mib, leastStore} {
		o.MaxStore = size
		b := open(t, o)
		publish(t, b, "obs.north.gauge", strings.Repeat("x", 1000))
		s, err := b.State(t.Context(), Observations)
		if err != nil {
			t.Fatal(err)
		}
		if want := size / 20 * 10; s.MaxBytes != want {
			t.Errorf("store of %d MiB: OBSERVATIONS may take %d bytes, want %d", size/mib, s.MaxBytes, want)
		}
		shut(t, b)
	}
	b := open(t, o)
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != 4 {
		t.Errorf("%d messages, want 4 (%v)", s.Messages, err)
	}
}

func TestRoomIsCappedBelowTheDisk(t *testing.T) {
	dir := t.TempDir()
	free, known, err := freeDisk(dir)
	if err != nil {
		t.Fatal(err)
	}
	if !known {
		t.Fatal("the free disk is not known on this system; the daemon is meant for systems where it is")
	}
	got, err := roomFor(dir, 1<<62)
	if err != nil {
		t.Fatal(err)
	}
	if got >= free || got < free/2 {
		t.Errorf("room %d with %d free: want below it, and most of it", got, free)
	}
	if got, err := roomFor(dir, leastStore); err != nil || got != leastStore {
		t.Errorf("room %d (%v), want the wished %d", got, err, leastStore)
	}
	// A store that fills its disk stays startable while a little is free; a
	// disk without room for the smallest store does not do.
	if got, err := capped(dir, 10*mib, 190*mib, gib); err != nil || got != 200*mib/10*9 {
		t.Errorf("nearly full disk: %d %v", got, err)
	}
	for _, c := range [][2]int64{{7 * mib, 900 * mib}, {60 * mib, 0}, {0, 0}} {
		_, err := capped(dir, c[0], c[1], gib)
		if e := isCode(t, err, Full); !e.Temporary() || e.Hint == "" {
			t.Errorf("full disk: %+v", e)
		}
	}
}
