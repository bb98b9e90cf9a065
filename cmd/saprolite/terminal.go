package main

import (
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"github.com/schollz/progressbar/v3"
	"github.com/spf13/cobra"
	"golang.org/x/term"

	"saprolite/alerts"
)

// What commands print for a person is written here, so that it reads alike.

// isTerminal tells whether w is a terminal somebody may be looking at.
func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	return ok && term.IsTerminal(int(f.Fd()))
}

// progress shows how far a long work has come, on a terminal only.
func progress(cmd *cobra.Command, total int64, unit string) *progressbar.ProgressBar {
	w := cmd.ErrOrStderr()
	if !isTerminal(w) {
		w = io.Discard
	}
	return progressbar.NewOptions64(total,
		progressbar.OptionSetWriter(w),
		progressbar.OptionSetItsString(unit),
		progressbar.OptionShowIts(),
		progressbar.OptionShowCount(),
		progressbar.OptionSetWidth(30),
		progressbar.OptionThrottle(100*time.Millisecond),
		progressbar.OptionClearOnFinish(),
	)
}

// sayMessage prints an alert message the way a person reads it: what, where
// and since when first, why after.
func sayMessage(w io.Writer, m alerts.Message) error {
	what := string(m.Kind) + ": " + string(m.Level)
	if m.MsgType == alerts.Cancel {
		what = string(m.Kind) + ": ended"
		if m.EndedWhy == alerts.Corrected {
			what = string(m.Kind) + ": withdrawn"
		}
	}
	line := fmt.Sprintf("%s  %-14s %s", m.Day, m.StandName, what)
	if !m.Told {
		_, err := fmt.Fprintf(w, "%s (recorded only)\n", line)
		return err
	}
	_, err := fmt.Fprintf(w, "%s\n%s\n%s\n", line, wrap(m.Headline, 12), wrap(m.Reason, 12))
	return err
}

// wrap breaks a sentence to lines of at most 100 characters, each indented.
func wrap(s string, indent int) string {
	const width = 100
	pad := strings.Repeat(" ", indent)
	var out strings.Builder
	line := pad
	for _, word := range strings.Fields(s) {
		if len(line)+1+len(word) > width && strings.TrimSpace(line) != "" {
			out.WriteString(line + "\n")
			line = pad
		}
		if strings.TrimSpace(line) != "" {
			line += " "
		}
		line += word
	}
	out.WriteString(line)
	return out.String()
}
