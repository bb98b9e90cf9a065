package main

import (
	"fmt"
	"io"
	"math"
	"net/url"
	"strings"

	"github.com/spf13/cobra"

	"saprolite/config"
	"saprolite/detectors/ledger"
)

func newCheck() *cobra.Command {
	var file string
	var quiet bool
	c := &cobra.Command{
		Use:   "check",
		Short: "Tell whether saprolite.yaml and the stands file are right",
		Long: `Reads both files strictly and names every mistake with file, line and cure. It
ends with code 0 when both are right and 78 when not, so it can stand before the
daemon's start. It opens no store and sends nothing.`,
		Example: `  saprolite check
  saprolite check --config /etc/saprolite/saprolite.yaml --quiet`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			cfg, reg, err := readBoth(file)
			if err != nil {
				return err
			}
			if !quiet {
				sayCheck(cmd, cfg, reg)
			}
			return nil
		},
	}
	configFlag(c, &file)
	c.Flags().BoolVarP(&quiet, "quiet", "q", false, "say nothing when all is right")
	return c
}

func sayCheck(cmd *cobra.Command, cfg *config.Config, reg *config.Register) {
	out := cmd.OutOrStdout()
	limits, hectares := 0, 0.0
	for i := range reg.Stands {
		if !math.IsNaN(float64(reg.Stands[i].StorageLimit)) {
			limits++
		}
		if h := reg.Stands[i].Hectares; !math.IsNaN(h) {
			hectares += h
		}
	}
	fmt.Fprintf(out, "%s and %s are right.\n", cfg.File, reg.File)
	fmt.Fprintf(out, "  place         %s\n", cfg.Place)
	area := ""
	if hectares > 0 {
		area = fmt.Sprintf(", together %.0f ha", hectares)
	}
	fmt.Fprintf(out, "  stands        %d%s; %d with a storage limit of their own\n", len(reg.Stands), area, limits)
	fmt.Fprintf(out, "  sources       %d that may speak, %d with a position\n", len(reg.SourceIDs()), len(reg.Positioned))
	if unlisted := unlisted(reg); len(unlisted) > 0 {
		fmt.Fprintf(out, "  not listed    %s: named by a stand, but no feature says where they are. Right?\n", strings.Join(unlisted, ", "))
	}
	fmt.Fprintf(out, "  data          %s\n", cfg.Data)
	if len(cfg.Destinations) == 0 {
		fmt.Fprintf(out, "  destinations  none: alerts are kept and shown, but nobody is written to\n")
	}
	for _, d := range cfg.Destinations {
		switch {
		case d.Mail != nil:
			fmt.Fprintf(out, "  destination   %s: mail through %s to %d\n", d.Name, d.Mail.Server, len(d.Mail.To))
		case d.Webhook != nil:
			fmt.Fprintf(out, "  destination   %s: webhook at %s\n", d.Name, host(d.Webhook.URL))
		}
	}
	sayUnused(out, reg)
}

// unused are the properties of the register that are read and checked, but of
// which this version makes nothing.
var unused = []struct {
	name  string
	given func(*config.Stand) bool
}{
	{"interception_share", func(s *config.Stand) bool { return !math.IsNaN(s.InterceptionShare) }},
	{"species", func(s *config.Stand) bool { return len(s.Species) > 0 }},
	{"canopy_cover", func(s *config.Stand) bool { return !math.IsNaN(s.CanopyCover) }},
	{"priority", func(s *config.Stand) bool { return s.Priority != 0 }},
	{"turgor_loss_mpa", func(s *config.Stand) bool { return !math.IsNaN(float64(s.TurgorLoss)) }},
	{"p50_mpa", func(s *config.Stand) bool { return !math.IsNaN(float64(s.P50)) }},
	{"p88_mpa", func(s *config.Stand) bool { return !math.IsNaN(float64(s.P88)) }},
}

// sayUnused says which properties were given for nothing, so that nobody takes
// them to be in the account.
func sayUnused(out io.Writer, reg *config.Register) {
	var list []string
	say := func(name string, n int, of string) {
		switch {
		case n == 1:
			list = append(list, fmt.Sprintf("%s (1 %s)", name, of))
		case n > 1:
			list = append(list, fmt.Sprintf("%s (%d %ss)", name, n, of))
		}
	}
	for _, p := range unused {
		n := 0
		for i := range reg.Stands {
			if p.given(&reg.Stands[i]) {
				n++
			}
		}
		say(p.name, n, "stand")
	}
	late := 0
	for _, s := range reg.Positioned {
		if s.Latency != 0 {
			late++
		}
	}
	say("latency", late, "source")
	if len(list) == 0 {
		return
	}
	fmt.Fprintf(out, "\nread and checked, not used in this version: %s\n", strings.Join(list, ", "))
	if strings.HasPrefix(list[0], "interception_share ") {
		fmt.Fprintf(out, "warning: the account is computed without interception_share; what the canopy keeps of the rain is set by interception_store_mm, %v where it is not given\n", ledger.DefaultCanopyStore)
	}
}

// unlisted are sources that stands name and no feature lists: perhaps a slip.
func unlisted(reg *config.Register) []string {
	var ids []string
	for _, id := range reg.SourceIDs() {
		if reg.Source(id).Line == 0 && reg.Stand(id) == nil {
			ids = append(ids, id)
		}
	}
	return ids
}

// host is the part of a webhook's address that holds no secret.
func host(address string) string {
	u, err := url.Parse(address)
	if err != nil {
		return "an address"
	}
	return u.Host
}
