package main

import (
	"context"
	"fmt"
	"io"
	"math"
	"strings"

	"github.com/spf13/cobra"

	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/detectors"
	"saprolite/detectors/climate"
	"saprolite/ingest/broker"
	"saprolite/ingest/quantity"
)

func newShow() *cobra.Command {
	var file string
	c := &cobra.Command{
		Use:   "show STAND",
		Short: "Print a stand's account of today, its limit, and where each number came from",
		Long: `Prints the account of one stand as of the last closed day: how much of its store
is used, against which limit, the day's water, and where each number came from.
It asks the running daemon, or opens the store when none runs.`,
		Example: `  saprolite show north-slope
  saprolite show north-slope --config /etc/saprolite/saprolite.yaml`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error { return runShow(cmd, file, args[0]) },
	}
	configFlag(c, &file)
	return c
}

func runShow(cmd *cobra.Command, file, id string) error {
	cfg, reg, err := readBoth(file)
	if err != nil {
		return err
	}
	stand := reg.Stand(id)
	if stand == nil {
		return exitWith(exitUsage, fmt.Errorf("no stand %q in %s%s", id, cfg.Stands, like(reg, id)))
	}
	ctx := cmd.Context()
	b, err := openStore(ctx, cfg)
	if err != nil {
		return err
	}
	defer b.Close(context.WithoutCancel(ctx))
	books, err := b.Books(ctx)
	if err != nil {
		return err
	}
	data, _, ok, err := books.Get(ctx, engine.HeadKey(id))
	if err != nil {
		return err
	}
	setup := standSetup(cfg, reg, stand)
	if !ok {
		if n, err := waiting(ctx, b, books); err != nil || n > 0 {
			fmt.Fprintf(cmd.OutOrStdout(), "%s (%s): no account yet; %d messages are being taken in, ask again in a few seconds.\n", stand.Name, id, n)
			return err
		}
		fmt.Fprintf(cmd.OutOrStdout(), "%s (%s): no account yet. It begins with the first day of rain data from %s.\n", stand.Name, id, setup.Options.RainFrom)
		return nil
	}
	head, err := engine.DecodeHead(data)
	if err != nil {
		return exitWith(exitData, fmt.Errorf("read the head of stand %s: %w", id, err))
	}
	account, err := detectors.Restore(setup.Options, head.Head)
	if err != nil {
		return exitWith(exitTemporary, fmt.Errorf("%w; the daemon does that at its next tick", err))
	}
	sheet{cmd.OutOrStdout()}.account(stand, &setup, account)
	return nil
}

// waiting is how many messages the books do not have yet.
func waiting(ctx context.Context, b *broker.Broker, books *broker.Books) (uint64, error) {
	state, err := b.State(ctx, broker.Observations)
	if err != nil {
		return 0, err
	}
	data, _, _, err := books.Get(ctx, engine.CursorKey)
	if err != nil {
		return 0, err
	}
	cursor, err := engine.DecodeCursor(data)
	if err != nil || cursor >= state.Last {
		return 0, err
	}
	return state.Last - cursor, nil
}

// like names the stands whose id or name holds what was asked for.
func like(reg *config.Register, id string) string {
	var found []string
	for i := range reg.Stands {
		s := &reg.Stands[i]
		if strings.Contains(s.ID, id) || strings.Contains(strings.ToLower(s.Name), strings.ToLower(id)) {
			found = append(found, s.ID)
		}
	}
	if len(found) == 0 || len(found) > 8 {
		return ""
	}
	return "; do you mean " + strings.Join(found, ", ") + "?"
}

// sheet prints an account as lines of name, value and origin.
type sheet struct{ out io.Writer }

func (s sheet) line(name, value, origin string) {
	fmt.Fprintf(s.out, "  %-22s %12s   %s\n", name, value, origin)
}

func (s sheet) account(stand *config.Stand, setup *engine.StandSetup, a *detectors.Stand) {
	t, limit := &a.Today, a.Limit()
	fmt.Fprintf(s.out, "%s (%s), account of %s\n\n", stand.Name, stand.ID, t.Day)
	s.line("storage deficit", mm(t.Deficit), "water missing from a full store")
	s.line("storage limit", mm(limit.Value), limit.Basis+interval(limit.Low, limit.High))
	if limit.Known() {
		s.line("left", fmt.Sprintf("%.0f %%", 100*math.Max(0, a.Left())), "1 - deficit / limit")
	}
	for _, f := range a.Findings() {
		s.line(string(f.Kind), string(f.Level), "since "+f.Onset.String())
	}
	if since, blind := a.Blind(); blind {
		s.line("blind", "", "no usable data since "+since.String()+"; see feed-silent")
	}

	fmt.Fprintf(s.out, "\nThe day's water\n")
	s.line("rain", mm(t.Precipitation), or(t.From.Rain, "should come from "+setup.Options.RainFrom))
	s.line("reaching the roots", mm(t.Flux.Input), "rain less what the canopy caught")
	s.line("reference ET", mm(t.ReferenceET), reference(t, setup))
	s.line("actual ET", mm(t.Flux.ActualET), actual(t))
	s.line("overflow", mm(t.Flux.Overflow), "past a full store: recharge and runoff")

	fmt.Fprintf(s.out, "\nThe years\n")
	y, years := a.Running(), a.Years()
	if y.Days == 0 && len(years) > 0 {
		y = years[len(years)-1] // the year has ended with this day
	}
	complete := 0
	for _, past := range years {
		if past.Complete() {
			complete++
		}
	}
	s.line("account since", a.First().String(), begun(a))
	s.line("deepest this year", mm(y.Max), dayOr(y.MaxDay))
	s.line("complete years", fmt.Sprint(complete), "with 90 % of days known and the store seen full")
}

// actual says how actual evapotranspiration came about.
func actual(t *detectors.Account) string {
	switch {
	case t.Still:
		return "unknown: the account stood still"
	case t.Basis.Measured:
		return "measured, " + t.From.ET
	case t.Basis.Usual:
		return "no data: what the stand usually uses at this time of year"
	}
	words := fmt.Sprintf("reference x coefficient %.2f", t.Coefficient)
	if t.Flux.Stress < 1 {
		words += fmt.Sprintf(" x stress %.2f", t.Flux.Stress)
	}
	return words + ", and what the canopy evaporates"
}

// reference says how reference evapotranspiration came about.
func reference(t *detectors.Account, setup *engine.StandSetup) string {
	switch t.Basis.Reference {
	case climate.None:
		return "should be made of data from " + setup.Options.AirFrom
	case climate.ByMonthly:
		return "monthly_reference_et_mm of the stands file"
	}
	return t.Basis.Reference.String() + ", " + t.From.Air
}

func or(words, otherwise string) string {
	if words == "" {
		return otherwise
	}
	return words
}

func begun(a *detectors.Stand) string {
	if a.State.Anchored {
		return "the store has been seen full since, so the deficit's zero is real"
	}
	return "taken as full then and not seen full since: the true deficit can be larger"
}

func mm(v quantity.Millimetres) string { return v.String() }

func interval(low, high quantity.Millimetres) string {
	if math.IsNaN(float64(low)) || math.IsNaN(float64(high)) {
		return ""
	}
	return fmt.Sprintf("; 90 %% interval %.0f to %.0f mm", float64(low), float64(high))
}

func dayOr(d quantity.Day) string {
	if d == quantity.NoDay {
		return ""
	}
	return "on " + d.String()
}
