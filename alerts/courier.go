package alerts

import (
	"context"
	"errors"
	"fmt"
	"regexp"
	"sync/atomic"
	"time"
)

const (
	// deliverTimeout is Standard Webhooks' upper figure (15 to 30 s); a mail
	// relay that answers takes far less.
	deliverTimeout = 30 * time.Second

	// stopGrace is what a delivery under way may still take when the daemon
	// stops: enough to hear the answer and not send twice; common practice of
	// the trade, no source.
	stopGrace = 5 * time.Second

	// longestRetryAfter bounds what a server may ask for: the longest wait of
	// the webhook schedule.
	longestRetryAfter = 24 * time.Hour

	// unknownOutcomes is how often a message may be sent without hearing the
	// outcome: at most two copies (reliability.md section 2, case 11).
	unknownOutcomes = 2

	// longestSleep lets a courier see within a minute that the clock was set.
	longestSleep = time.Minute

	// skipsBeforeSave: messages passed over move the cursor, which is worth a
	// write only now and then; passing over them again changes nothing.
	skipsBeforeSave = 256

	arrivalsAhead = 64 // messages read ahead of the book, taken with one write
)

// CourierOptions are a courier's own settings.
type CourierOptions struct {
	Filter   Filter
	Schedule Schedule         // MailSchedule() or WebhookSchedule()
	Now      func() time.Time // nil: time.Now
	OnEvent  func(Event)      // nil: nobody listens; must not block
}

// Courier brings the messages of one stream to one destination, each at least
// once, with its own book, so that no destination can hold up another.
//
// Of one episode only the newest message waits: a later revision takes the
// place of one that could not be delivered yet. Messages are tried one at a
// time; of those that are due, the one that came first. The book is written
// before a message is first tried and after each outcome.
type Courier struct {
	dest   Destination
	source Source
	books  Books
	opts   CourierOptions
	key    string

	book    *book
	unsaved bool // something that must be written before the next attempt
	skipped int  // messages passed over since the last write

	status atomic.Pointer[CourierStatus]
}

// CourierStatus is a courier's state for metrics and pages.
type CourierStatus struct {
	Destination   string
	Cursor        uint64    // last stream number taken or passed over
	Pending       int       // messages waiting
	Dead          int       // dead letters kept
	OldestPending time.Time // since when the longest waiting episode waits; zero: none
	LastSuccess   time.Time // zero: never
}

// NewCourier returns a courier from source to dest; Run makes it work. It
// returns an error when the name or the options cannot be used.
func NewCourier(dest Destination, source Source, books Books, opts CourierOptions) (*Courier, error) {
	name := dest.Name()
	if !regexp.MustCompile(`^[a-z0-9][a-z0-9_-]{0,63}$`).MatchString(name) {
		return nil, fmt.Errorf("destination name %q: use small letters, digits, - and _, at most 64", name)
	}
	if err := opts.Schedule.validate(); err != nil {
		return nil, fmt.Errorf("destination %s: %w", name, err)
	}
	for _, l := range opts.Filter.Levels {
		if l.Rank() == 0 {
			return nil, fmt.Errorf("destination %s: %q is not a level; use drawing down, low, nearly spent, spent, silent or blind", name, l)
		}
	}
	if opts.Now == nil {
		opts.Now = time.Now
	}
	if opts.OnEvent == nil {
		opts.OnEvent = func(Event) {}
	}
	c := &Courier{dest: dest, source: source, books: books, opts: opts, key: "destination." + name}
	c.status.Store(&CourierStatus{Destination: name})
	return c, nil
}

// Status returns the state as of the last attempt or pause. It may be called
// from any goroutine.
func (c *Courier) Status() CourierStatus { return *c.status.Load() }

// Run works until ctx is done, and then returns nil. Any error it returns means
// that the stream or the book cannot be used. Run may be called once at a time.
func (c *Courier) Run(ctx context.Context) error {
	b, err := loadBook(ctx, c.books, c.key)
	if err != nil {
		return fmt.Errorf("destination %s: %w", c.dest.Name(), err)
	}
	c.book, c.unsaved, c.skipped = b, false, 0
	c.publish()

	follow, stop := context.WithCancel(ctx)
	arrivals := make(chan arrival, arrivalsAhead)
	ended := make(chan error, 1)
	go func(after uint64) {
		ended <- c.source.Follow(follow, after, func(seq uint64, m Message) error {
			select {
			case arrivals <- arrival{seq, m}:
				return nil
			case <-follow.Done():
				return follow.Err()
			}
		})
		close(ended)
	}(b.Cursor)

	err = c.work(ctx, arrivals, ended)
	stop()
	for range ended { // until Follow has returned
	}
	if c.unsaved || c.skipped > 0 {
		err = errors.Join(err, c.save(ctx))
	}
	if err != nil {
		return fmt.Errorf("destination %s: %w", c.dest.Name(), err)
	}
	return nil
}

type arrival struct {
	seq uint64
	m   Message
}

// work takes what arrives and tries what is due until ctx is done.
func (c *Courier) work(ctx context.Context, arrivals <-chan arrival, ended <-chan error) error {
	furthest := max(c.opts.Schedule.longest(), longestRetryAfter)
	for ctx.Err() == nil {
		if err := c.takeWaiting(arrivals); err != nil {
			return err
		}
		if c.unsaved || c.skipped >= skipsBeforeSave {
			if err := c.save(ctx); err != nil {
				return err
			}
		}
		p, wait := c.book.due(c.opts.Now(), furthest)
		if p != nil {
			if err := c.attempt(ctx, p); err != nil {
				return err
			}
			continue
		}
		in := arrivals
		if c.book.full() {
			in = nil
		}
		c.publish()
		timer := time.NewTimer(min(wait, longestSleep))
		select {
		case a := <-in:
			if err := c.take(a); err != nil {
				return err
			}
		case err := <-ended:
			if ctx.Err() != nil {
				return nil
			}
			if err == nil {
				err = errors.New("the stream ended")
			}
			return fmt.Errorf("following the messages: %w", err)
		case <-timer.C:
		case <-ctx.Done():
		}
		timer.Stop()
	}
	return nil
}

// takeWaiting takes every arrival that is there already.
func (c *Courier) takeWaiting(arrivals <-chan arrival) error {
	for !c.book.full() {
		select {
		case a := <-arrivals:
			if err := c.take(a); err != nil {
				return err
			}
		default:
			return nil
		}
	}
	return nil
}

// take enters one message in the book, or passes over it.
func (c *Courier) take(a arrival) error {
	b, m := c.book, a.m
	if a.seq <= b.Cursor {
		return nil
	}
	b.Cursor = a.seq
	_, known := b.Known[m.ID]
	if m.MsgType == Cancel && known {
		delete(b.Known, m.ID)
		c.unsaved = true
	}
	if !m.Told || !c.opts.Filter.passes(m, known) {
		c.skipped++
		return nil
	}
	if m.MsgType != Cancel {
		b.Known[m.ID] = m.Revision
	}
	now := c.opts.Now().UTC()
	wait, _ := c.opts.Schedule.after(m.MessageID(), 0)
	p := &parcel{Seq: a.seq, Message: m, Waiting: now, Next: now.Add(wait)}
	if err := p.weigh(); err != nil {
		return err
	}
	if old := b.Pending[m.ID]; old != nil {
		p.Waiting = old.Waiting
		c.tell(EventSuperseded, old, nil)
	}
	b.Pending[m.ID] = p
	c.unsaved = true
	return nil
}

// attempt tries p once and writes the outcome. Its error is the book's.
func (c *Courier) attempt(ctx context.Context, p *parcel) error {
	if p.First.IsZero() {
		p.First = c.opts.Now().UTC()
	}
	stopped, err := c.deliver(ctx, p.Message)
	now := c.opts.Now().UTC()
	if err == nil {
		delete(c.book.Pending, p.Message.ID)
		c.book.LastSuccess = now
		if err := c.save(ctx); err != nil {
			return err
		}
		p.Attempts++
		c.tell(EventDelivered, p, nil)
		return nil
	}
	u := asUndeliverable(err)
	if stopped && !u.Permanent && !u.Unknown {
		return nil // cut short by the stop: it does not count, and is tried again after the start
	}
	p.Attempts++
	p.Reason = shorten(u.Error())
	if u.Unknown {
		p.Unknown++
	}
	wait, again := c.opts.Schedule.after(p.Message.MessageID(), p.Attempts)
	p.Next = now.Add(max(wait, min(u.RetryAfter, longestRetryAfter)))
	if g := c.opts.Schedule.GiveUpAfter; g > 0 && p.Next.Sub(p.First) > g {
		again = false
	}
	if again && !u.Permanent && p.Unknown < unknownOutcomes {
		if err := c.save(ctx); err != nil {
			return err
		}
		c.tell(EventRetry, p, u)
		return nil
	}
	forgotten := c.book.bury(p, now)
	if err := c.save(ctx); err != nil {
		return err
	}
	c.tell(EventDead, p, u)
	if forgotten != nil {
		c.opts.OnEvent(Event{Kind: EventForgotten, Destination: c.dest.Name(),
			MessageID: forgotten.MessageID, Seq: forgotten.Seq, Attempt: forgotten.Attempts})
	}
	return nil
}

// deliver hands m over within deliverTimeout. When ctx is done meanwhile it
// waits stopGrace for the answer; stopped tells that this too ran out.
func (c *Courier) deliver(ctx context.Context, m Message) (stopped bool, err error) {
	d, cancel := context.WithTimeout(context.WithoutCancel(ctx), deliverTimeout)
	defer cancel()
	release := context.AfterFunc(ctx, func() {
		select {
		case <-time.After(stopGrace):
			cancel()
		case <-d.Done():
		}
	})
	defer release()
	err = c.dest.Deliver(d, m)
	return errors.Is(d.Err(), context.Canceled), err
}

func (c *Courier) save(ctx context.Context) error {
	if err := c.book.save(ctx, c.books, c.key); err != nil {
		return err
	}
	c.unsaved, c.skipped = false, 0
	c.publish()
	return nil
}

func (c *Courier) publish() {
	s := &CourierStatus{
		Destination: c.dest.Name(), Cursor: c.book.Cursor,
		Pending: len(c.book.Pending), Dead: len(c.book.Dead), LastSuccess: c.book.LastSuccess,
	}
	for _, p := range c.book.Pending {
		if s.OldestPending.IsZero() || p.Waiting.Before(s.OldestPending) {
			s.OldestPending = p.Waiting
		}
	}
	c.status.Store(s)
}

func (c *Courier) tell(kind EventKind, p *parcel, u *Undeliverable) {
	e := Event{Kind: kind, Destination: c.dest.Name(), MessageID: p.Message.MessageID(), Seq: p.Seq, Attempt: p.Attempts}
	if u != nil {
		e.Err = u
	}
	if kind == EventRetry {
		e.Next = p.Next
	}
	c.opts.OnEvent(e)
}
