package main

import (
	"fmt"
	"io"
	"os"
	"time"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"
)

func newRun() *cobra.Command {
	var file, level string
	c := &cobra.Command{
		Use:   "run",
		Short: "Run the daemon",
		Long: `Runs the daemon: takes observations in, keeps the account of every stand, raises
alerts and brings them to their destinations, serves /metrics, /healthz and
/readyz. It logs to standard error, for a person on a terminal and as JSON
otherwise. SIGTERM or Ctrl-C ends it cleanly.

Exit codes: 0 ended as asked, 65 unusable data, 70 a bug, 75 temporary (start me
again), 78 configuration.`,
		Example: `  saprolite run
  saprolite run --config /etc/saprolite/saprolite.yaml --log-level debug`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			lowest, err := zerolog.ParseLevel(level)
			if err != nil {
				return usage(cmd, fmt.Errorf("--log-level %q: use debug, info, warn or error", level))
			}
			return runRun(cmd, file, newLog(cmd.ErrOrStderr(), lowest))
		},
	}
	configFlag(c, &file)
	c.Flags().StringVar(&level, "log-level", "info", "debug, info, warn or error")
	return c
}

func runRun(cmd *cobra.Command, file string, log zerolog.Logger) error {
	cfg, reg, err := readBoth(file)
	if err != nil {
		return err
	}
	d, err := openDaemon(cmd.Context(), cfg, reg, log)
	if err != nil {
		return err
	}
	log.Info().Str("place", cfg.Place).Int("stands", len(reg.Stands)).Str("broker", d.broker.URL()).Str("data", cfg.Data).Msg("started")
	err = d.run(cmd.Context())
	log.Info().Msg("ended")
	return err
}

// newLog logs for a person on a terminal, as JSON otherwise.
func newLog(w io.Writer, lowest zerolog.Level) zerolog.Logger {
	if isTerminal(w) {
		w = zerolog.ConsoleWriter{Out: w, TimeFormat: time.DateTime, NoColor: os.Getenv("NO_COLOR") != ""}
	}
	return zerolog.New(w).Level(lowest).With().Timestamp().Logger()
}
