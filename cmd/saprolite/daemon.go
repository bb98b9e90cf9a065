package main

import (
	"context"
	"errors"
	"fmt"
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

	settle chan struct{} // asks the clock for a tick now
}

const (
	saveEvery   = 30 * time.Second // design 3.7
	settleAfter = 5 * time.Second  // without a message, when data wait to be settled: a load has ended
	closeWithin = 30 * time.Second // reliability.md section 6
)

// openDaemon opens the store and the books.
func openDaemon(ctx context.Context, cfg *config.Config, reg *config.Register, log zerolog.Logger) (*daemon, error) {
	d := &daemon{cfg: cfg, reg: reg, log: log, settle: make(chan struct{}, 1)}
	var err error
	if d.broker, err = broker.Open(ctx, brokerOptions(cfg, log)); err != nil {
		return nil, opening(err)
	}
	// The books are read and written until the very end, whatever ctx does.
	if d.keeper, err = newKeeper(context.WithoutCancel(ctx), cfg, reg, d.broker, log); err != nil {
		return nil, errors.Join(err, d.close())
	}
	d.watch = newWatch(d)
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
	couriers, err := d.couriers()
	if err != nil {
		return errors.Join(err, d.close())
	}
	var actors run.Group
	actor := func(work func(context.Context) error) {
		ctx, cancel := context.WithCancel(ctx)
		actors.Add(func() error { return work(ctx) }, func(error) { cancel() })
	}
	actor(func(ctx context.Context) error { <-ctx.Done(); return nil })
	actor(d.loop)
	if !d.invented {
		actor(d.clock)
	}
	for _, c := range couriers {
		actor(c.Run)
	}
	actor(d.watch.serve)
	return errors.Join(actors.Run(), d.close())
}

// loop takes in the stream, one message after the other, and keeps the books.
func (d *daemon) loop(ctx context.Context) error {
	keep := context.WithoutCancel(ctx)
	messages := make(chan broker.Msg, 1024)
	ended := make(chan error, 1)
	follow, stop := context.WithCancel(ctx)
	defer stop()
	go func() {
		ended <- d.broker.Follow(follow, broker.Following{
			Stream: broker.Observations, After: d.keeper.engine.Cursor(),
			Each: func(m broker.Msg) error {
				select {
				case messages <- m:
					return nil
				case <-follow.Done():
					return follow.Err()
				}
			},
			Notice: func(err error) { d.log.Error().Err(err).Msg("observations") },
		})
	}()
	save := time.NewTicker(saveEvery)
	defer save.Stop()
	quiet := time.NewTimer(settleAfter)
	defer quiet.Stop()
	for {
		select {
		case m := <-messages:
			if err := d.take(keep, m); err != nil {
				return err
			}
			quiet.Reset(settleAfter)
		case <-save.C:
			if err := d.keeper.save(keep); err != nil {
				return err
			}
			d.watch.look()
		case <-quiet.C:
			if d.keeper.engine.Unsettled() {
				select {
				case d.settle <- struct{}{}:
				default:
				}
			} else if d.keeper.engine.Settled() { // so that show need not wait for the next save
				if err := d.keeper.save(keep); err != nil {
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
		if err := d.keeper.save(ctx); err != nil {
			return err
		}
	}
	if m.Pending == 0 {
		d.watch.caughtUp()
	}
	if m.Subject == engine.TickSubject || m.Pending == 0 {
		d.watch.look()
	}
	return nil
}

// clock is the one that lets time in: a tick at the start, at every full
// hour, and when data that came in late wait to be settled.
func (d *daemon) clock(ctx context.Context) error {
	const again = 10 * time.Second // after a tick that could not be stored; common practice of the trade, no source
	for {
		now := time.Now().UTC()
		wait := now.Truncate(time.Hour).Add(time.Hour).Sub(now)
		if _, err := d.broker.Publish(ctx, engine.TickSubject, nil, engine.EncodeTick(now)); err != nil {
			if ctx.Err() != nil {
				return nil
			}
			d.log.Error().Err(err).Msg("tick could not be stored")
			wait = again
		}
		timer := time.NewTimer(wait)
		select {
		case <-ctx.Done():
			timer.Stop()
			return nil
		case <-timer.C:
		case <-d.settle:
			timer.Stop()
		}
	}
}
