package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"maps"
	"os"
	"slices"
	"time"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"

	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/ingest/broker"
	"saprolite/ingest/observation"
	"saprolite/ingest/wire"
)

func newLoad() *cobra.Command {
	var configFile string
	var correct bool
	c := &cobra.Command{
		Use:   "load FILE...",
		Short: "Bring years of history in from CSV files",
		Long: `Reads history files and stores them in the broker, in large batches that are
as safe as single messages. With a running daemon they go to it; without one the
store is opened, and the accounts are settled before the command ends.

Loading a file twice changes nothing. Of two values for the same time the one that
became known later counts (column available, by default the end of its time); with
--correct the rows of this load became known now, and so replace what is there.

Rows that cannot be used are listed with file and line and left out; the command
then ends with code 65. What the history shows of the past is recorded and not
told; what is still true today is told once.

Columns: source,quantity,start,end,value,unit,sd,flag,available
(end, sd, flag and available may be left out; see saprolite hindcast --help).`,
		Example: `  saprolite load rain-1990-2030.csv air-1990-2030.csv
  saprolite load --config /etc/saprolite/saprolite.yaml history.csv`,
		Args: cobra.MinimumNArgs(1),
		RunE: func(cmd *cobra.Command, files []string) error { return runLoad(cmd, configFile, files, correct) },
	}
	configFlag(c, &configFile)
	c.Flags().BoolVar(&correct, "correct", false, "these rows correct what was known: they count from now on")
	return c
}

func runLoad(cmd *cobra.Command, configFile string, files []string, correct bool) error {
	cfg, reg, err := readBoth(configFile)
	if err != nil {
		return err
	}
	ctx := cmd.Context()
	b, err := openStore(ctx, cfg)
	if err != nil {
		return err
	}
	defer b.Close(context.WithoutCancel(ctx))
	if !b.Attached() {
		if err := firstTick(ctx, b); err != nil {
			return err
		}
	}
	l := &loading{reg: reg, to: b, errs: cmd.ErrOrStderr(), packs: map[string]*pack{}}
	if correct {
		l.known = time.Now().UTC()
	}
	if err := l.load(ctx, cmd, files); err != nil {
		return err
	}
	if b.Attached() {
		fmt.Fprintln(cmd.OutOrStdout(), "The running daemon takes it in; saprolite show STAND tells how far it is.")
	} else if err := l.settleNow(ctx, cmd, cfg, b); err != nil {
		return err
	}
	if l.left > mostListed {
		fmt.Fprintf(l.errs, "... and %d more\n", l.left-mostListed)
	}
	if l.left > 0 {
		return exitWith(exitData, fmt.Errorf("rows that could not be used: %d; they are listed above", l.left))
	}
	return nil
}

// openStore reaches the running daemon's store, or opens it when none runs; no
// port is opened for that.
func openStore(ctx context.Context, cfg *config.Config) (*broker.Broker, error) {
	o := brokerOptions(cfg, zerolog.Nop())
	o.Listen = ""
	b, err := broker.OpenOrAttach(ctx, o)
	return b, opening(err)
}

// loading cuts history files into packs of one source each and stores them.
type loading struct {
	reg   *config.Register
	to    *broker.Broker
	errs  io.Writer
	packs map[string]*pack

	// known is when the rows became known, whatever they say themselves; zero:
	// when they say, or at their end.
	known time.Time

	rows, left int
	bytes      int64
	tally      tally
}

// pack is rows of one source on their way into one message.
type pack struct {
	body bytes.Buffer
	csv  *wire.CSVWriter
	rows int
}

// packRows is how many rows go into one message: about 60 kB, far below a
// message's limit, and few enough that a thousand sources fit in memory.
const packRows = 1000

func (l *loading) load(ctx context.Context, cmd *cobra.Command, files []string) error {
	began := time.Now()
	total := int64(0)
	for _, name := range files {
		info, err := os.Stat(name)
		if err != nil {
			return exitWith(exitData, fmt.Errorf("load: %w", err))
		}
		total += info.Size()
	}
	bar := progress(cmd, total, "bytes")
	if err := l.loadFiles(ctx, files, bar); err != nil {
		return err
	}
	bar.Finish()
	took := time.Since(began)
	l.tally.say(cmd.OutOrStdout())
	fmt.Fprintf(cmd.OutOrStdout(), "%d observations in %.1f s: %.0f observations/s, %.1f MB/s\n",
		l.rows, took.Seconds(), float64(l.rows)/took.Seconds(), float64(l.bytes)/1e6/took.Seconds())
	return nil
}

// loadFiles stores all rows of the files; what is read goes to bar as well.
func (l *loading) loadFiles(ctx context.Context, files []string, bar io.Writer) error {
	batches, err := l.to.Load(ctx)
	if err != nil {
		return err
	}
	for _, name := range files {
		if err := l.file(name, batches, bar); err != nil {
			return err
		}
	}
	for _, id := range slices.Sorted(maps.Keys(l.packs)) {
		if err := l.send(batches, id, l.packs[id]); err != nil {
			return err
		}
	}
	if err := batches.Flush(); err != nil {
		return fmt.Errorf("load: %w", err)
	}
	return nil
}

func (l *loading) file(name string, batches *broker.Loader, bar io.Writer) error {
	file, err := os.Open(name)
	if err != nil {
		return exitWith(exitData, fmt.Errorf("load: %w", err))
	}
	defer file.Close()
	r, err := wire.NewCSVReader(io.TeeReader(file, bar), name)
	if err != nil {
		return exitWith(exitData, err)
	}
	for {
		o, err := r.Next()
		var p *wire.Problem
		switch {
		case errors.Is(err, io.EOF):
			return nil
		case errors.As(err, &p):
			l.leave("%v", err)
			continue
		case err != nil:
			return exitWith(exitData, fmt.Errorf("load %s: %w", name, err))
		}
		if !l.reg.Known(o.Source) {
			l.leave("%s: line %d: no stand draws on source %q and the stands file does not list it; add it there, or correct the id", name, r.Line(), o.Source)
			continue
		}
		if err := l.row(batches, o); err != nil {
			return err
		}
	}
}

func (l *loading) leave(format string, args ...any) {
	if l.left++; l.left <= mostListed {
		fmt.Fprintf(l.errs, format+"\n", args...)
	}
}

func (l *loading) row(batches *broker.Loader, o observation.Observation) error {
	p := l.packs[o.Source]
	if p == nil {
		p = &pack{}
		l.packs[o.Source] = p
	}
	if p.csv == nil {
		p.csv = wire.NewCSVWriter(&p.body)
	}
	if !l.known.IsZero() {
		o.Available = l.known
	}
	l.tally.add(o)
	if err := p.csv.Write(o); err != nil {
		return fmt.Errorf("load: %w", err)
	}
	l.rows++
	if p.rows++; p.rows < packRows {
		return nil
	}
	return l.send(batches, o.Source, p)
}

func (l *loading) send(batches *broker.Loader, id string, p *pack) error {
	if p.rows == 0 {
		return nil
	}
	if err := p.csv.Flush(); err != nil {
		return fmt.Errorf("load: %w", err)
	}
	data := bytes.Clone(p.body.Bytes())
	p.body.Reset()
	p.csv, p.rows = nil, 0
	l.bytes += int64(len(data))
	err := batches.Add("obs."+engine.LoadFeed+"."+id, map[string]string{engine.ContentType: engine.TypeCSV}, data)
	if err != nil {
		return fmt.Errorf("load: %w", err)
	}
	return nil
}

// firstTick lets the time of now into a store whose books are still empty. A
// store with a past has a clock, and so has a running daemon; without one a row
// that is dated years ahead would be taken as good.
func firstTick(ctx context.Context, b *broker.Broker) error {
	books, err := b.Books(ctx)
	if err != nil {
		return err
	}
	_, _, begun, err := books.Get(ctx, engine.CursorKey)
	if err != nil || begun {
		return err
	}
	_, err = b.Publish(ctx, engine.TickSubject, nil, engine.EncodeTick(time.Now()))
	return err
}

// settleNow settles what has been stored, in a store that this command owns:
// a tick of now, everything up to it taken in, the books saved.
func (l *loading) settleNow(ctx context.Context, cmd *cobra.Command, cfg *config.Config, b *broker.Broker) error {
	k, err := newKeeper(ctx, cfg, l.reg, b, newLog(cmd.ErrOrStderr(), zerolog.ErrorLevel))
	if err != nil {
		return err
	}
	k.onHeld = func(h engine.Held) { l.leave("held: %s: %s (%s)", or(h.Record, h.Source), h.Reason, h.Code) }
	last, err := b.Publish(ctx, engine.TickSubject, nil, engine.EncodeTick(time.Now()))
	if err != nil {
		return err
	}
	bar := progress(cmd, int64(last-k.engine.Cursor()), "packs")
	err = takeUpTo(ctx, k, last, func() { bar.Add(1) })
	bar.Finish()
	if err != nil {
		return err
	}
	if err := k.save(ctx); err != nil {
		return err
	}
	c := k.engine.Counts()
	fmt.Fprintf(cmd.OutOrStdout(), "settled %d stand-days\n", c.StandDays)
	if c.Outdated > 0 && l.known.IsZero() {
		fmt.Fprintf(cmd.OutOrStdout(), "values that differ from what is known, are not newer and so changed nothing: %d; to replace what is there load them with --correct\n", c.Outdated)
	}
	return nil
}

// takeUpTo takes in the stream up to and with message last.
func takeUpTo(ctx context.Context, k *keeper, last uint64, each func()) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	done := errors.New("done")
	err := k.broker.Follow(ctx, broker.Following{
		Stream: broker.Observations, After: k.engine.Cursor(), Created: k.engine.Stream(),
		Each: func(m broker.Msg) error {
			if _, err := k.handle(ctx, m); err != nil {
				return err
			}
			each()
			if m.Seq >= last {
				return done
			}
			return nil
		},
		Notice: func(err error) {
			gap, missing := errors.AsType[*broker.Gap](err)
			switch {
			case errors.Is(err, broker.ErrNotFound):
				cancel(exitWith(exitTemporary, fmt.Errorf("load: %w; load again", err)))
			case !missing:
				k.log.Warn().Err(err).Msg("observations cannot be read; trying again")
			case gap.Reason == broker.Removed:
				if err := k.missing(ctx, gap); err != nil {
					cancel(err)
				}
			default: // last means another message now
				cancel(exitWith(exitTemporary, fmt.Errorf("load: %w; load again", err)))
			}
		},
	})
	if errors.Is(err, done) {
		return nil
	}
	if cause := context.Cause(ctx); cause != nil {
		return cause
	}
	return err
}
