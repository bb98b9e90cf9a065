package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"sync"
	"time"

	"github.com/oklog/run"
	"github.com/rs/zerolog"

	"saprolite/alerts"
	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/ingest/broker"
)

// daemon is the always-on program:
//
//	          obs.>, clock.tick                       alert.>
//	feeds ──> OBSERVATIONS ──> loop (engine) ──> ALERTS ──> a courier per destination
//	clock ──────┘               │  └─> HELD                   (mail, webhook)
//	                            └─> BOOKS
//
// One group of actors owns all lifetimes: the first to end ends them all, the
// loop saves its books last, and only then the broker closes.
type daemon struct {
	cfg    *config.Config
	reg    *config.Register
	log    zerolog.Logger
	broker *broker.Broker
	keeper *keeper
	watch  *watch

	// invented says that somebody else publishes the ticks: the demo.
	invented bool
	// onTold, if set, is called in the loop for each message that was told.
	onTold func(alerts.Message)

	began  time.Time
	settle chan struct{} // asks the clock for a tick now
	again  time.Duration // how soon the clock tries again, see writeAgain
}

const (
	saveEvery   = 30 * time.Second // design 3.7
	settleAfter = 5 * time.Second  // without a message, when data wait to be settled: a load has ended
	closeWithin = 30 * time.Second // reliability.md section 6

	// A tick that could not be stored is tried again after writeAgain; after
	// failedWrites of them in a row the store is taken to be stuck, which only a
	// new start mends (reliability.md case 4). Common practice of the trade, no
	// source.
	writeAgain   = 10 * time.Second
	failedWrites = 6
)

// openDaemon opens the store and the books.
func openDaemon(ctx context.Context, cfg *config.Config, reg *config.Register, log zerolog.Logger) (*daemon, error) {
	d := &daemon{cfg: cfg, reg: reg, log: log, began: time.Now(), settle: make(chan struct{}, 1), again: writeAgain}
	var err error
	if d.broker, err = broker.Open(ctx, brokerOptions(cfg, log)); err != nil {
		return nil, opening(err)
	}
	// The books are read and written until the very end, whatever ctx does.
	if d.keeper, err = newKeeper(context.WithoutCancel(ctx), cfg, reg, d.broker, log); err != nil {
		return nil, errors.Join(err, d.close())
	}
	d.watch = newWatch(d)
	if d.watch.couriers, err = d.couriers(); err != nil {
		return nil, errors.Join(err, d.close())
	}
	return d, nil
}

func (d *daemon) close() error {
	ctx, cancel := context.WithTimeout(context.Background(), closeWithin)
	defer cancel()
	return d.broker.Close(ctx)
}

// run works until ctx is done, which is a clean end, or something fails that
// only a restart can mend.
func (d *daemon) run(ctx context.Context) error {
	var actors run.Group
	var failures failures
	actor := func(work func(context.Context) error) {
		ctx, cancel := context.WithCancel(ctx)
		actors.Add(func() error { return failures.add(work(ctx)) }, func(error) { cancel() })
	}
	actor(func(ctx context.Context) error { <-ctx.Done(); return nil })
	actor(d.loop)
	if !d.invented {
		actor(d.clock)
	}
	for _, c := range d.watch.couriers {
		actor(c.Run)
	}
	actor(d.watch.serve)
	_ = actors.Run() // the first actor's error only; failures has it and all others
	failures.add(d.close())
	return failures.joined()
}

// failures are what the actors ended with. A daemon that is asked to end ends
// with nil, and yet its last save may fail: nobody's error may be lost.
type failures struct {
	mu  sync.Mutex
	all []error
}

func (f *failures) add(err error) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if err != nil {
		f.all = append(f.all, err)
	}
	return err
}

// joined is all of them; the first decides the exit code, because the others
// may be its consequences.
func (f *failures) joined() error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if len(f.all) < 2 {
		return errors.Join(f.all...)
	}
	return exitWith(exitCode(f.all[0], io.Discard), errors.Join(f.all...))
}

// arrival is what Follow has to say, in its order: a message, messages that
// will not come, or what only a new start mends.
type arrival struct {
	msg broker.Msg
	gap *broker.Gap
	err error
}

// follow follows the observations from a cursor on until ctx is done.
func (d *daemon) follow(ctx context.Context, cursor uint64, stream time.Time, to chan<- arrival) error {
	say := func(a arrival) error {
		select {
		case to <- a:
			return nil
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	away := false // said already
	return d.broker.Follow(ctx, broker.Following{
		Stream: broker.Observations, After: cursor, Created: stream,
		Each: func(m broker.Msg) error {
			away = false
			return say(arrival{msg: m})
		},
		Notice: func(err error) {
			gap, missing := errors.AsType[*broker.Gap](err)
			switch {
			case missing:
				_ = say(arrival{gap: gap}) // its only error is the end, which Follow sees itself
			case errors.Is(err, broker.ErrNotFound): // a start sets the stream up again
				_ = say(arrival{err: err})
			case !away:
				away = true
				d.log.Error().Err(err).Msg("observations cannot be read; trying again")
			}
		},
	})
}

// loop takes in the stream, one message after the other, and keeps the books.
func (d *daemon) loop(ctx context.Context) error {
	keep := context.WithoutCancel(ctx)
	arrivals := make(chan arrival, 1024)
	ended := make(chan error, 1)
	follow, stop := context.WithCancel(ctx)
	defer stop()
	cursor, stream := d.keeper.engine.Cursor(), d.keeper.engine.Stream()
	go func() { ended <- d.follow(follow, cursor, stream, arrivals) }()
	save := time.NewTicker(saveEvery)
	defer save.Stop()
	quiet := time.NewTimer(settleAfter)
	defer quiet.Stop()
	for {
		d.watch.turned()
		select {
		case a := <-arrivals:
			if err := d.arrived(keep, a); err != nil {
				return err
			}
			quiet.Reset(settleAfter)
		case <-save.C:
			if err := d.save(keep); err != nil {
				return err
			}
		case <-quiet.C:
			if d.keeper.engine.Unsettled() {
				select {
				case d.settle <- struct{}{}:
				default:
				}
			} else if d.keeper.engine.Settled() { // so that show need not wait for the next save
				if err := d.save(keep); err != nil {
					return err
				}
			}
			quiet.Reset(settleAfter)
		case err := <-ended:
			if ctx.Err() != nil {
				return d.keeper.save(keep)
			}
			return fmt.Errorf("follow the observations: %w", err)
		}
	}
}

func (d *daemon) save(ctx context.Context) error {
	err := d.keeper.save(ctx)
	d.watch.look()
	return err
}

func (d *daemon) arrived(ctx context.Context, a arrival) error {
	switch {
	case a.gap != nil:
		err := d.keeper.missing(ctx, a.gap)
		d.watch.took(d.keeper.engine.Cursor())
		return err
	case a.err != nil:
		return fmt.Errorf("follow the observations: %w", a.err)
	}
	return d.take(ctx, a.msg)
}

func (d *daemon) take(ctx context.Context, m broker.Msg) error {
	told, err := d.keeper.handle(ctx, m)
	for _, t := range told {
		log := d.log.Info()
		if !t.Told {
			log = d.log.Debug()
		}
		log.Str("stand", t.Stand).Str("kind", string(t.Kind)).Str("level", string(t.Level)).
			Str("type", string(t.MsgType)).Str("id", t.MessageID()).Bool("told", t.Told).Msg(t.Headline)
		if d.onTold != nil {
			d.onTold(t)
		}
	}
	if err != nil {
		return err
	}
	if d.keeper.since >= saveAfter {
		if err := d.save(ctx); err != nil {
			return err
		}
	}
	if m.Pending == 0 {
		d.watch.caughtUp()
	}
	if m.Subject == engine.TickSubject {
		d.watch.look()
	}
	d.watch.took(d.keeper.engine.Cursor())
	return nil
}

// clock is the one that lets time in: a tick at the start, at every full
// hour, and when data that came in late wait to be settled. It is the daemon's
// canary too: a store that does not take its ticks takes nobody's data.
func (d *daemon) clock(ctx context.Context) error {
	failed := 0
	for {
		now := time.Now().UTC()
		wait := now.Truncate(time.Hour).Add(time.Hour).Sub(now)
		settle := d.settle
		_, err := d.broker.Publish(ctx, engine.TickSubject, nil, engine.EncodeTick(now))
		if ctx.Err() != nil {
			return nil
		}
		before := d.watch.wrote(err)
		switch {
		case err == nil && before != nil:
			d.log.Info().Msg("ticks are stored again")
		case err != nil && before == nil:
			d.log.Error().Err(err).Msg("tick could not be stored; trying again")
		}
		switch {
		case err == nil:
			failed = 0
		case errors.Is(err, broker.ErrFull) && d.behind(ctx):
			// What the loop has still to work on makes room when it is in the
			// books; a new start would only begin that work again.
			wait, settle = d.again, nil
		default:
			if failed++; failed == failedWrites {
				return exitWith(exitTemporary, fmt.Errorf("the store takes no ticks, %d tries in a row; only a new start can mend that: %w", failed, err))
			}
			wait, settle = d.again, nil
		}
		timer := time.NewTimer(wait)
		select {
		case <-ctx.Done():
			timer.Stop()
			return nil
		case <-timer.C:
		case <-settle:
			timer.Stop()
		}
	}
}

// behind tells whether observations wait that the loop has not worked on.
func (d *daemon) behind(ctx context.Context) bool {
	state, err := d.broker.State(ctx, broker.Observations)
	return err == nil && state.Last > d.watch.cursor.Load()
}
