package broker

import (
	"context"
	"errors"
	"strconv"
	"sync"
	"testing"
	"time"
)

var errEnough = errors.New("enough")

// collect follows until n messages have come.
func collect(t testing.TB, b *Broker, f Following, n int) []Msg {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), within)
	defer cancel()
	var all []Msg
	f.Each = func(m Msg) error {
		if all = append(all, m); len(all) == n {
			return errEnough
		}
		return nil
	}
	if err := b.Follow(ctx, f); err != errEnough {
		t.Fatalf("following %s: %v after %d of %d messages", f.Stream, err, len(all), n)
	}
	return all
}

// followed runs a Follow beside the test.
type followed struct {
	mu      sync.Mutex
	seqs    []uint64
	data    []string
	notices []error
	changed chan struct{}
	cancel  context.CancelFunc
	ended   chan error
}

func follow(t *testing.T, b *Broker, f Following) *followed {
	ctx, cancel := context.WithCancel(context.Background())
	g := &followed{changed: make(chan struct{}, 1), cancel: cancel, ended: make(chan error, 1)}
	tell := func() {
		select {
		case g.changed <- struct{}{}:
		default:
		}
	}
	f.Each = func(m Msg) error {
		g.mu.Lock()
		defer g.mu.Unlock()
		g.seqs, g.data = append(g.seqs, m.Seq), append(g.data, string(m.Data))
		tell()
		return nil
	}
	f.Notice = func(err error) {
		g.mu.Lock()
		defer g.mu.Unlock()
		g.notices = append(g.notices, err)
		tell()
	}
	go func() { g.ended <- b.Follow(ctx, f) }()
	t.Cleanup(func() {
		cancel()
		if err := <-g.ended; !errors.Is(err, context.Canceled) && !errors.Is(err, ErrClosed) {
			t.Errorf("Follow ended with %v", err)
		}
	})
	return g
}

// until waits for a condition on what came.
func (g *followed) until(t *testing.T, what string, done func() bool) {
	t.Helper()
	deadline := time.After(within)
	for {
		g.mu.Lock()
		ok := done()
		g.mu.Unlock()
		if ok {
			return
		}
		select {
		case <-g.changed:
		case <-deadline:
			t.Fatalf("waited for %s; got sequences %v, notices %v", what, g.seqs, g.notices)
		}
	}
}

func (g *followed) has(n int) func() bool { return func() bool { return len(g.seqs) >= n } }

func (g *followed) gap() *Gap {
	for _, err := range g.notices {
		if gap, ok := errors.AsType[*Gap](err); ok {
			return gap
		}
	}
	return nil
}

func TestFollowFromACursorAndFiltered(t *testing.T) {
	b := open(t, small(t))
	for i := range 10 {
		publish(t, b, "obs.north.gauge-"+strconv.Itoa(i%2), strconv.Itoa(i+1))
	}
	all := collect(t, b, Following{Stream: Observations, After: 7}, 3)
	for i, m := range all {
		if m.Seq != uint64(8+i) || string(m.Data) != strconv.Itoa(8+i) || m.Pending != uint64(2-i) || m.Stored.IsZero() {
			t.Errorf("%+v", m)
		}
	}
	publish(t, b, "clock.tick", "t")
	got := collect(t, b, Following{Stream: Observations, Subjects: []string{"obs.*.gauge-1", "clock.>"}, After: 3}, 5)
	for i, want := range []uint64{4, 6, 8, 10, 11} {
		if got[i].Seq != want {
			t.Errorf("message %d has sequence %d, want %d", i, got[i].Seq, want)
		}
	}
}

func TestFollowEndsWithContextAndWithItsReceiver(t *testing.T) {
	b := open(t, small(t))
	ctx, cancel := context.WithCancel(t.Context())
	publish(t, b, "obs.north.gauge", "1")
	err := b.Follow(ctx, Following{Stream: Observations, Each: func(Msg) error { cancel(); return nil }})
	if !errors.Is(err, context.Canceled) {
		t.Errorf("after cancel: %v", err)
	}
	own := errors.New("own")
	if err := b.Follow(t.Context(), Following{Stream: Observations, Each: func(Msg) error { return own }}); err != own {
		t.Errorf("error of Each: %v", err)
	}
	// An error of Each that looks like a lost connection is still the receiver's.
	lost := &Error{Code: Unreachable}
	if err := b.Follow(t.Context(), Following{Stream: Observations, Each: func(Msg) error { return lost }}); err != lost {
		t.Errorf("error of Each: %v", err)
	}
}

func TestFollowSurvivesTheLossOfItsConsumer(t *testing.T) {
	b := open(t, small(t))
	g := follow(t, b, Following{Stream: Observations})
	n := 0
	for range 3 {
		for range 5 {
			n++
			publish(t, b, "obs.north.gauge", strconv.Itoa(n))
		}
		g.until(t, "messages", g.has(n))
		s, err := b.stream(t.Context(), Observations)
		if err != nil {
			t.Fatal(err)
		}
		names := 0
		for name := range s.ConsumerNames(t.Context()).Name() {
			names++
			if err := s.DeleteConsumer(t.Context(), name); err != nil {
				t.Fatal(err)
			}
		}
		if names != 1 {
			t.Fatalf("%d consumers, want 1", names)
		}
	}
	publish(t, b, "obs.north.gauge", "after")
	g.until(t, "the message after the losses", g.has(n+1))
	for i, seq := range g.seqs {
		if seq != uint64(i+1) {
			t.Fatalf("sequences %v", g.seqs)
		}
	}
	if len(g.notices) < 3 || g.gap() != nil {
		t.Errorf("notices %v, want three interruptions and no gap", g.notices)
	}
}

func TestFollowSurvivesTheLossOfTheStream(t *testing.T) {
	b := open(t, small(t))
	for i := range 5 {
		publish(t, b, "obs.north.gauge", "old "+strconv.Itoa(i))
	}
	g := follow(t, b, Following{Stream: Observations})
	g.until(t, "the old messages", g.has(5))
	if err := b.js.DeleteStream(t.Context(), Observations); err != nil {
		t.Fatal(err)
	}
	g.until(t, "a notice", func() bool { return len(g.notices) > 0 })
	if err := b.ensureStreams(t.Context(), layout(256*mib, 1)); err != nil {
		t.Fatal(err)
	}
	for i := range 8 { // more than were read of the old stream
		publish(t, b, "obs.north.gauge", "new "+strconv.Itoa(i))
	}
	g.until(t, "the new messages", g.has(13))
	if g.data[5] != "new 0" || g.data[12] != "new 7" {
		t.Errorf("got %v", g.data)
	}
	if gap := g.gap(); gap == nil || gap.Reason != Replaced || gap.To != 5 {
		t.Errorf("gap %+v, want replaced up to 5", gap)
	}
}

func TestFollowReportsWhatIsMissing(t *testing.T) {
	b := open(t, small(t))
	for range 10 {
		publish(t, b, "obs.north.gauge", "x")
	}
	if err := b.PurgeUpTo(t.Context(), Observations, 4); err != nil {
		t.Fatal(err)
	}
	s, err := b.stream(t.Context(), Observations)
	if err != nil {
		t.Fatal(err)
	}
	if err := s.DeleteMsg(t.Context(), 7); err != nil {
		t.Fatal(err)
	}
	state, err := b.State(t.Context(), Observations)
	if err != nil {
		t.Fatal(err)
	}
	var gaps []Gap
	note := func(err error) {
		if gap, ok := errors.AsType[*Gap](err); ok {
			gaps = append(gaps, *gap)
		}
	}
	all := collect(t, b, Following{Stream: Observations, After: 2, Created: state.Created, Notice: note}, 5)
	if all[0].Seq != 5 || all[1].Seq != 6 || all[2].Seq != 8 {
		t.Errorf("sequences %d %d %d", all[0].Seq, all[1].Seq, all[2].Seq)
	}
	want := []Gap{{Observations, Removed, 3, 4}, {Observations, Removed, 7, 7}}
	if len(gaps) != 2 || gaps[0] != want[0] || gaps[1] != want[1] {
		t.Errorf("gaps %+v, want %+v", gaps, want)
	}

	// A cursor beyond the end: an older copy of the store was put back.
	gaps = nil
	all = collect(t, b, Following{Stream: Observations, After: 25, Notice: note}, 1)
	if all[0].Seq != 5 || len(gaps) == 0 || gaps[0] != (Gap{Observations, Regressed, 11, 25}) {
		t.Errorf("first %d, gaps %+v", all[0].Seq, gaps)
	}
	// A cursor of another stream of that name.
	gaps = nil
	all = collect(t, b, Following{Stream: Observations, After: 9, Created: state.Created.Add(time.Second), Notice: note}, 1)
	if all[0].Seq != 5 || len(gaps) == 0 || gaps[0] != (Gap{Observations, Replaced, 1, 9}) {
		t.Errorf("first %d, gaps %+v", all[0].Seq, gaps)
	}
	// No gap where nothing is missing, also after a full purge.
	gaps = nil
	if err := b.PurgeUpTo(t.Context(), Observations, 10); err != nil {
		t.Fatal(err)
	}
	publish(t, b, "obs.north.gauge", "11")
	if all = collect(t, b, Following{Stream: Observations, After: 10, Created: state.Created, Notice: note}, 1); all[0].Seq != 11 || len(gaps) != 0 {
		t.Errorf("first %d, gaps %+v", all[0].Seq, gaps)
	}
}

func TestFollowLeavesNoConsumerBehind(t *testing.T) {
	b := open(t, small(t))
	publish(t, b, "obs.north.gauge", "1")
	for range 5 {
		collect(t, b, Following{Stream: Observations}, 1)
	}
	s, err := b.js.Stream(t.Context(), Observations)
	if err != nil {
		t.Fatal(err)
	}
	if n := s.CachedInfo().State.Consumers; n != 0 {
		t.Errorf("%d consumers left", n)
	}
}

// A receiver that is slower than the pulls expire must lose nothing.
func TestSlowReceiverGetsEverythingOnce(t *testing.T) {
	b := open(t, small(t))
	l, err := b.Load(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	const n = 3 * pullMessages
	for range n {
		if err := l.Add("obs.north.gauge", nil, make([]byte, 200)); err != nil {
			t.Fatal(err)
		}
	}
	if err := l.Flush(); err != nil {
		t.Fatal(err)
	}
	next := uint64(1)
	err = b.Follow(t.Context(), Following{Stream: Observations, Each: func(m Msg) error {
		if m.Seq != next {
			t.Errorf("sequence %d, want %d", m.Seq, next)
		}
		if next++; m.Seq == 10 {
			time.Sleep(pullExpiry + pullHeartbeat)
		}
		if m.Seq == n {
			return errEnough
		}
		return nil
	}})
	if err != errEnough {
		t.Error(err)
	}
}
