package alerts

import (
	"context"
	"slices"
	"sync"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

// shelf is Books in memory; refuse makes Put fail.
type shelf struct {
	mu     sync.Mutex
	values map[string][]byte
	rev    uint64
	refuse error
}

func (s *shelf) Get(_ context.Context, key string) ([]byte, uint64, bool, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	v, ok := s.values[key]
	return v, s.rev, ok, nil
}

func (s *shelf) Put(ctx context.Context, key string, data []byte) (uint64, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.refuse != nil {
		return 0, s.refuse
	}
	if err := ctx.Err(); err != nil {
		return 0, err
	}
	if s.values == nil {
		s.values = map[string][]byte{}
	}
	s.values[key] = slices.Clone(data)
	s.rev++
	return s.rev, nil
}

// stream is Source in memory: message number i+1 is the i-th.
type stream struct {
	mu   sync.Mutex
	all  []Message
	more chan struct{}
}

func newStream(ms ...Message) *stream { return &stream{all: ms, more: make(chan struct{}, 1)} }

func (s *stream) add(ms ...Message) {
	s.mu.Lock()
	s.all = append(s.all, ms...)
	s.mu.Unlock()
	select {
	case s.more <- struct{}{}:
	default:
	}
}

func (s *stream) Follow(ctx context.Context, after uint64, fn func(uint64, Message) error) error {
	for {
		s.mu.Lock()
		pending := slices.Clone(s.all[after:])
		s.mu.Unlock()
		for _, m := range pending {
			after++
			if err := fn(after, m); err != nil {
				return err
			}
		}
		select {
		case <-s.more:
		case <-ctx.Done():
			return nil
		}
	}
}

// sent is one call of Deliver.
type sent struct {
	At time.Duration // since the start of the test
	ID string
}

// door is a Destination that answers what answer says.
type door struct {
	start time.Time

	mu     sync.Mutex
	answer func(ctx context.Context, m Message) error
	sent   []sent
}

// set changes the answer while a courier works.
func (d *door) set(answer func(ctx context.Context, m Message) error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.answer = answer
}

func (d *door) Name() string { return "ranger-office" }

func (d *door) Deliver(ctx context.Context, m Message) error {
	d.mu.Lock()
	d.sent = append(d.sent, sent{time.Since(d.start), m.MessageID()})
	answer := d.answer
	d.mu.Unlock()
	if answer == nil {
		return nil
	}
	return answer(ctx, m)
}

func (d *door) calls() []sent {
	d.mu.Lock()
	defer d.mu.Unlock()
	return slices.Clone(d.sent)
}

func (d *door) ids() (ids []string) {
	for _, s := range d.calls() {
		ids = append(ids, s.ID)
	}
	return ids
}

func message(episode string, revision int, typ MsgType) Message {
	return Message{
		ID: episode, Revision: revision, MsgType: typ, Status: Actual, Told: true,
		Stand: "upper-beck", StandName: "Upper Beck", Kind: finding.StoreLow, Level: finding.Low,
		Onset: 100, Day: 101, Ended: quantity.NoDay,
		Evidence: []Evidence{{Name: "storage deficit", Value: 110, Low: Number(nan), High: Number(nan), Unit: "mm"}},
	}
}

var nan = func() float64 { z := 0.0; return z / z }()

// exact is a schedule without jitter, so that times can be written down.
func exact(s Schedule) Schedule { s.Early, s.Late = 0, 0; return s }

// office is a courier with its surroundings, in a synctest bubble.
type office struct {
	t      *testing.T
	door   *door
	source *stream
	books  *shelf
	opts   CourierOptions
	c      *Courier

	mu     sync.Mutex
	events []Event
	cancel context.CancelFunc
	done   chan error
}

func newOffice(t *testing.T, opts CourierOptions, ms ...Message) *office {
	o := &office{t: t, door: &door{start: time.Now()}, source: newStream(ms...), books: &shelf{}, opts: opts}
	o.opts.OnEvent = func(e Event) {
		o.mu.Lock()
		defer o.mu.Unlock()
		o.events = append(o.events, e)
	}
	return o
}

func (o *office) open() {
	o.t.Helper()
	c, err := NewCourier(o.door, o.source, o.books, o.opts)
	if err != nil {
		o.t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	o.c, o.cancel, o.done = c, cancel, make(chan error, 1)
	go func() { o.done <- c.Run(ctx) }()
}

func (o *office) close() {
	o.t.Helper()
	o.cancel()
	if err := <-o.done; err != nil {
		o.t.Fatalf("Run: %v", err)
	}
}

func (o *office) kinds() (ks []EventKind) {
	o.mu.Lock()
	defer o.mu.Unlock()
	for _, e := range o.events {
		ks = append(ks, e.Kind)
	}
	return ks
}

func (o *office) stored() *book {
	o.t.Helper()
	b, err := loadBook(context.Background(), o.books, "destination.ranger-office")
	if err != nil {
		o.t.Fatal(err)
	}
	return b
}

func wantEqual(t *testing.T, what string, got, want any) {
	t.Helper()
	if d := cmp.Diff(want, got); d != "" {
		t.Errorf("%s (-want +got):\n%s", what, d)
	}
}
