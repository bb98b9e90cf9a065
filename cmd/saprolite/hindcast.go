package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"saprolite/alerts"
	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// hindcastFlags are the flags of design 5.8.
type hindcastFlags struct {
	stands, config, from, to string
	history                  []string
	alerts, daily            string
}

func newHindcast() *cobra.Command {
	var f hindcastFlags
	c := &cobra.Command{
		Use:   "hindcast --stands FILE --history FILE[,FILE...]",
		Short: "Run the account over a history, without a broker",
		Long: `Runs the same engine as the daemon over a history, each day knowing only what
was available by then. --daily writes the account, one row a stand and day, as
known on the last day; --alerts writes the messages as they would have been
told at the time, one JSON object a line. Without --alerts they are shown.

The history is CSV with the columns
  source,quantity,start,end,value,unit,sd,flag,available
of which end, sd, flag and available may be left out:
  source,quantity,start,value,unit
  gauge-1,precipitation,2031-03-01,12.4,mm`,
		Example: `  saprolite hindcast --stands stands.geojson --history rain.csv,air.csv --daily daily.csv --alerts alerts.jsonl
  saprolite hindcast --stands stands.geojson --history all.csv --from 2031-01-01 --to 2032-12-31`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error { return runHindcast(cmd, f) },
	}
	c.Flags().StringVar(&f.stands, "stands", "", "register of stands and sources (GeoJSON)")
	c.Flags().StringSliceVar(&f.history, "history", nil, "history files (CSV), separated by commas")
	c.Flags().StringVar(&f.config, "config", "", "saprolite.yaml, for place, limits and thresholds; defaults without it")
	c.Flags().StringVar(&f.from, "from", "", "first day to write (YYYY-MM-DD); the account begins with the history all the same")
	c.Flags().StringVar(&f.to, "to", "", "last day (YYYY-MM-DD); default: the last day of the history")
	c.Flags().StringVar(&f.alerts, "alerts", "", "write the messages to this file (JSON lines)")
	c.Flags().StringVar(&f.daily, "daily", "", "write the account to this file (CSV)")
	return c
}

func runHindcast(cmd *cobra.Command, f hindcastFlags) error {
	if f.stands == "" || len(f.history) == 0 {
		return usage(cmd, errors.New("--stands and --history are needed"))
	}
	from, to, err := f.days()
	if err != nil {
		return usage(cmd, err)
	}
	cfg := config.Default(".")
	if f.config != "" {
		if cfg, err = config.Load(f.config); err != nil {
			return exitWith(exitConfiguration, err)
		}
	}
	reg, err := config.LoadRegister(f.stands)
	if err != nil {
		return exitWith(exitConfiguration, err)
	}
	if problems := config.Together(cfg, reg); f.config != "" && len(problems) > 0 {
		return exitWith(exitConfiguration, problems)
	}
	opts := engineSetup(cfg, reg)
	opts.Record = &alerts.Memory{}
	opts.Until = to
	e, err := engine.New(opts)
	if err != nil {
		return err
	}
	h := engine.NewHindcast(e)
	left, err := readHistory(cmd, f.history, h)
	if err != nil {
		return err
	}
	first, last := h.Days()
	if first > last {
		return exitWith(exitData, fmt.Errorf("no usable observation in %s", strings.Join(f.history, ", ")))
	}
	if to == quantity.NoDay {
		to = last
		e.Until(to)
	}
	if err := f.run(cmd, e, h, from, to); err != nil {
		return err
	}
	if left > 0 {
		return exitWith(exitData, fmt.Errorf("rows that could not be used: %d; they are listed above", left))
	}
	return nil
}

func (f *hindcastFlags) days() (from, to quantity.Day, err error) {
	from, to = quantity.NoDay, quantity.NoDay
	if f.from != "" {
		if from, err = quantity.ParseDay(f.from); err != nil {
			return from, to, fmt.Errorf("--from: %w", err)
		}
	}
	if f.to != "" {
		if to, err = quantity.ParseDay(f.to); err != nil {
			return from, to, fmt.Errorf("--to: %w", err)
		}
	}
	if to != quantity.NoDay && from > to {
		return from, to, fmt.Errorf("--from %s is after --to %s", from, to)
	}
	return from, to, nil
}

// run lets the history happen and writes what was asked for.
func (f *hindcastFlags) run(cmd *cobra.Command, e *engine.Engine, h *engine.Hindcast, from, to quantity.Day) error {
	told := func(m alerts.Message) error { return sayMessage(cmd.OutOrStdout(), m) }
	var close func() error
	if f.alerts != "" {
		file, err := create(f.alerts)
		if err != nil {
			return err
		}
		lines := json.NewEncoder(file)
		lines.SetEscapeHTML(false)
		told, close = func(m alerts.Message) error { return lines.Encode(m) }, file.commit
		defer file.discard()
	}
	first, _ := h.Days()
	bar := progress(cmd, int64(to-first)+1, "days")
	err := h.Run(to,
		func(m alerts.Message) error {
			if m.Day < from {
				return nil
			}
			return told(m)
		},
		func(quantity.Day) error { return bar.Add(1) })
	bar.Finish()
	if err != nil {
		return fmt.Errorf("hindcast: %w", err)
	}
	if close != nil {
		if err := close(); err != nil {
			return err
		}
	}
	if f.daily != "" {
		file, err := create(f.daily)
		if err != nil {
			return err
		}
		defer file.discard()
		if err := e.WriteDaily(file, from); err != nil {
			return fmt.Errorf("write %s: %w", f.daily, err)
		}
		if err := file.commit(); err != nil {
			return err
		}
	}
	sayHindcast(cmd.ErrOrStderr(), e, first, to)
	return nil
}

// sayHindcast closes with a line on what was done.
func sayHindcast(w io.Writer, e *engine.Engine, first, to quantity.Day) {
	accounts := 0
	for _, v := range e.Stands() {
		if v.Account != nil {
			accounts++
		} else {
			fmt.Fprintf(w, "stand %s: no rain data, no account\n", v.Setup.Info.ID)
		}
	}
	c := e.Counts()
	fmt.Fprintf(w, "%s to %s: %d observations, %d stands with an account, %d stand-days settled\n", first, to, c.Observations, accounts, c.StandDays)
}

// mostListed is how many rows that could not be used are listed one by one.
const mostListed = 20

// readHistory reads the files into the hindcast and returns how many rows
// could not be used, after saying which and why.
func readHistory(cmd *cobra.Command, files []string, h *engine.Hindcast) (left int, err error) {
	say := func(format string, args ...any) {
		if left++; left <= mostListed {
			fmt.Fprintf(cmd.ErrOrStderr(), format+"\n", args...)
		}
	}
	var sum tally
	for _, name := range files {
		file, err := os.Open(name)
		if err != nil {
			return left, exitWith(exitData, fmt.Errorf("read history: %w", err))
		}
		defer file.Close()
		r, err := wire.NewCSVReader(file, name)
		if err != nil {
			return left, exitWith(exitData, err)
		}
		for {
			o, err := r.Next()
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				var p *wire.Problem
				if !errors.As(err, &p) {
					return left, fmt.Errorf("read %s: %w", name, err)
				}
				say("%v", err)
				continue
			}
			if held := h.Add(o); held != nil {
				say("%s: line %d: %s: %s (%s)", name, r.Line(), held.Record, held.Reason, held.Code)
				continue
			}
			sum.add(o)
		}
	}
	if left > mostListed {
		fmt.Fprintf(cmd.ErrOrStderr(), "... and %d more\n", left-mostListed)
	}
	sum.say(cmd.ErrOrStderr())
	return left, nil
}

// output is a file that appears under its name only when it is complete.
type output struct {
	*os.File
	name string
	done bool
}

func create(name string) (*output, error) {
	file, err := os.CreateTemp(filepath.Dir(name), "."+filepath.Base(name)+"-*")
	if err != nil {
		return nil, fmt.Errorf("write %s: %w", name, err)
	}
	return &output{File: file, name: name}, nil
}

func (o *output) commit() error {
	o.done = true
	err := errors.Join(o.Chmod(0o644), o.Close())
	if err == nil {
		err = os.Rename(o.File.Name(), o.name)
	}
	if err != nil {
		return fmt.Errorf("write %s: %w", o.name, err)
	}
	return nil
}

func (o *output) discard() {
	if !o.done {
		o.Close()
		os.Remove(o.File.Name())
	}
}
