package broker

import (
	"errors"
	"strconv"
	"strings"
	"testing"
	"time"
)

func TestPublishAndLast(t *testing.T) {
	b := open(t, small(t))
	before := time.Now()
	seq, err := b.Publish(t.Context(), "obs.north.gauge", map[string]string{"Content-Type": "application/senml+json"}, []byte("[]"))
	if err != nil || seq != 1 {
		t.Fatalf("sequence %d, error %v", seq, err)
	}
	publish(t, b, "obs.north.other", "2")
	m, ok, err := b.Last(t.Context(), Observations, "obs.north.gauge")
	if err != nil || !ok {
		t.Fatal(ok, err)
	}
	if m.Subject != "obs.north.gauge" || m.Seq != 1 || string(m.Data) != "[]" || m.Header.Get("Content-Type") != "application/senml+json" {
		t.Errorf("%+v", m)
	}
	if m.Stored.Before(before.Add(-time.Second)) || m.Stored.After(time.Now().Add(time.Second)) {
		t.Errorf("stored at %v", m.Stored)
	}
	if _, ok, err := b.Last(t.Context(), Observations, "obs.north.none"); ok || err != nil {
		t.Errorf("last of an unknown subject: %v %v", ok, err)
	}
	_, _, err = b.Last(t.Context(), "NONE", "x")
	isCode(t, err, NotFound)
	_, err = b.State(t.Context(), "NONE")
	isCode(t, err, NotFound)
}

func TestPublishRefusesWhatCannotBeSent(t *testing.T) {
	b := open(t, small(t))
	for _, subject := range []string{"", "obs..x", ".obs", "obs.", "obs.*", "obs.>", "obs.a b", "obs.a\r\nPUB x"} {
		_, err := b.Publish(t.Context(), subject, nil, nil)
		isCode(t, err, Invalid)
	}
	for name, value := range map[string]string{"Nats-Rollup": "all", "a b": "1", "a:b": "1", "": "1", "a": "1\r\nNats-Rollup: all"} {
		_, err := b.Publish(t.Context(), "obs.north.gauge", map[string]string{name: value}, nil)
		isCode(t, err, Invalid)
	}
	_, err := b.Publish(t.Context(), "obs.north.gauge", nil, make([]byte, maxMessage+1))
	isCode(t, err, TooLarge)
	_, err = b.Publish(t.Context(), "obs.north.gauge", nil, make([]byte, maxBook+1))
	isCode(t, err, TooLarge)
	_, err = b.Publish(t.Context(), "nobody.listens", nil, nil)
	if e := isCode(t, err, Unreachable); !e.Temporary() {
		t.Errorf("%v is not temporary", e)
	}
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != 0 {
		t.Errorf("%d messages were stored (%v)", s.Messages, err)
	}
}

func TestPublishExpect(t *testing.T) {
	b := open(t, small(t))
	const subject = "alert.oak-1.store-low"
	publish(t, b, "alert.oak-2.store-low", "another subject moves the stream")
	first, err := b.PublishExpect(t.Context(), subject, []byte("low"), "e-0001", 0)
	if err != nil {
		t.Fatal(err)
	}
	// Sent again because its answer was lost: stored once.
	again, err := b.PublishExpect(t.Context(), subject, []byte("low"), "e-0001", 0)
	if err != nil || again != first {
		t.Errorf("the same again: sequence %d, error %v, want %d", again, err, first)
	}
	// Somebody who read before that must read again.
	_, err = b.PublishExpect(t.Context(), subject, []byte("low, says another"), "e-0002", 0)
	if e := isCode(t, err, Moved); !errors.Is(err, ErrMoved) || errors.Is(err, ErrFull) || e.Temporary() {
		t.Errorf("moved: %v", err)
	}
	second, err := b.PublishExpect(t.Context(), subject, []byte("spent"), "e-0003", first)
	if err != nil || second <= first {
		t.Errorf("sequence %d after %d, error %v", second, first, err)
	}
	if m, _, err := b.Last(t.Context(), Alerts, subject); err != nil || m.Seq != second || string(m.Data) != "spent" {
		t.Errorf("last: %+v %v", m, err)
	}
	if s, err := b.State(t.Context(), Alerts); err != nil || s.Messages != 3 {
		t.Errorf("%d messages, want 3 (%v)", s.Messages, err)
	}
}

func TestHeldIsStoredOncePerID(t *testing.T) {
	b := open(t, small(t))
	for range 2 {
		if _, err := b.Publish(t.Context(), "held.unit.north", map[string]string{IDHeader: "17-1"}, []byte("furlongs")); err != nil {
			t.Fatal(err)
		}
	}
	if s, err := b.State(t.Context(), Held); err != nil || s.Messages != 1 {
		t.Errorf("%d messages, want 1 (%v)", s.Messages, err)
	}
}

// fill publishes until the stream takes no more and returns the refusal.
func fill(t *testing.T, b *Broker) error {
	t.Helper()
	big := make([]byte, maxMessage-1000)
	l, err := b.Load(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for range 2 * leastStore / mib {
		if err = l.Add("obs.north.gauge", nil, big); err != nil {
			break
		}
	}
	for err == nil { // what is left for single messages
		_, err = b.Publish(t.Context(), "obs.north.gauge", nil, big)
	}
	return err
}

func TestFullStoreRefusesAndRecovers(t *testing.T) {
	o := small(t)
	o.MaxStore = leastStore
	b := open(t, o)
	isCode(t, fill(t, b), Full)
	s, err := b.State(t.Context(), Observations)
	if err != nil || s.Bytes > uint64(s.MaxBytes) || s.Bytes < uint64(s.MaxBytes)/2 {
		t.Fatalf("full at %d of %d bytes (%v)", s.Bytes, s.MaxBytes, err)
	}
	if s.First != 1 {
		t.Errorf("a full store dropped old messages: it begins at %d", s.First)
	}
	_, err = b.Publish(t.Context(), "obs.north.gauge", nil, make([]byte, maxMessage-1000))
	if e := isCode(t, err, Full); !e.Temporary() {
		t.Errorf("%v is not temporary", e)
	}
	// Alerts and books must still get through.
	publish(t, b, "alert.oak-1.store-low", "spent")
	books, err := b.Books(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if _, err := books.Put(t.Context(), "head.oak-1", make([]byte, 30_000)); err != nil {
		t.Error(err)
	}
	if err := b.PurgeUpTo(t.Context(), Observations, s.Last-2); err != nil {
		t.Fatal(err)
	}
	after, err := b.State(t.Context(), Observations)
	if err != nil || after.First != s.Last-1 || after.Last != s.Last || after.Messages != 2 {
		t.Errorf("after the purge %+v (%v)", after, err)
	}
	if seq := publish(t, b, "obs.north.gauge", "room again"); seq != s.Last+1 {
		t.Errorf("sequence %d, want %d", seq, s.Last+1)
	}
	if err := b.PurgeUpTo(t.Context(), Observations, 0); err != nil {
		t.Error(err)
	}
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != 3 {
		t.Errorf("purging up to 0 removed something: %+v %v", s, err)
	}
}

func TestLoaderStoresAllInOrder(t *testing.T) {
	b := open(t, small(t))
	l, err := b.Load(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	const n = 2*batchMessages + 17
	for i := range n {
		if err := l.Add("obs.north.gauge", map[string]string{"Row": strconv.Itoa(i)}, []byte(strconv.Itoa(i))); err != nil {
			t.Fatal(err)
		}
	}
	if messages, _, _ := l.Stored(); messages != 2*batchMessages {
		t.Errorf("%d stored before the flush, want %d", messages, 2*batchMessages)
	}
	for range 2 { // a second flush has nothing to do
		if err := l.Flush(); err != nil {
			t.Fatal(err)
		}
	}
	messages, bytes, last := l.Stored()
	if messages != n || last != n || bytes == 0 {
		t.Errorf("stored %d messages, %d bytes, up to %d", messages, bytes, last)
	}
	i := 0
	all := collect(t, b, Following{Stream: Observations}, n)
	for _, m := range all {
		if string(m.Data) != strconv.Itoa(i) || m.Header.Get("Row") != strconv.Itoa(i) || m.Seq != uint64(i+1) {
			t.Fatalf("message %d: %+v", i, m)
		}
		i++
	}

	isCode(t, l.Add("alert.oak-1.store-low", nil, nil), Invalid)
	isCode(t, l.Add("obs.north.gauge", map[string]string{IDHeader: "1"}, nil), Invalid)
	isCode(t, l.Add("obs.north.gauge", nil, make([]byte, maxMessage)), TooLarge)
	if err := l.Flush(); err != nil {
		t.Fatal(err)
	}
	if s, err := b.State(t.Context(), Observations); err != nil || s.Messages != n {
		t.Errorf("%d messages (%v)", s.Messages, err)
	}
}

func TestBatchThatDoesNotFitIsRefusedWhole(t *testing.T) {
	o := small(t)
	o.MaxStore = leastStore
	b := open(t, o)
	isCode(t, fill(t, b), Full)
	before, err := b.State(t.Context(), Observations)
	if err != nil {
		t.Fatal(err)
	}
	left := uint64(before.MaxBytes) - before.Bytes
	// A batch of which about half would fit.
	l, err := b.Load(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	size := int(left / 50)
	for range 100 {
		if err := l.Add("obs.north.gauge", nil, []byte(strings.Repeat("x", size))); err != nil {
			t.Fatal(err)
		}
	}
	isCode(t, l.Flush(), Full)
	after, err := b.State(t.Context(), Observations)
	if err != nil || after != before {
		t.Errorf("a refused batch left %+v, before %+v (%v)", after, before, err)
	}
	// It waits, and goes once there is room.
	if err := b.PurgeUpTo(t.Context(), Observations, before.Last); err != nil {
		t.Fatal(err)
	}
	if err := l.Flush(); err != nil {
		t.Fatal(err)
	}
	if after, err = b.State(t.Context(), Observations); err != nil || after.Messages != 100 {
		t.Errorf("%+v %v", after, err)
	}
}
