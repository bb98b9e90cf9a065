package main

import (
	"fmt"
	"math"

	"github.com/spf13/cobra"

	"saprolite/config"
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
	fmt.Fprintf(out, "  data          %s\n", cfg.Data)
	if len(cfg.Destinations) == 0 {
		fmt.Fprintf(out, "  destinations  none: alerts are kept and shown, but nobody is written to\n")
	}
	for _, d := range cfg.Destinations {
		switch {
		case d.Mail != nil:
			fmt.Fprintf(out, "  destination   %s: mail through %s to %d\n", d.Name, d.Mail.Server, len(d.Mail.To))
		case d.Webhook != nil:
			fmt.Fprintf(out, "  destination   %s: webhook %s\n", d.Name, d.Webhook.URL)
		}
	}
}
