package main

import (
	"runtime/debug"

	"github.com/spf13/cobra"
)

func newRoot() *cobra.Command {
	root := &cobra.Command{
		Use:   "saprolite",
		Short: "The account of the water a forest lives on",
		Long: `saprolite keeps, stand by stand and day by day, the account of the water that
trees draw from soil and weathered rock, and warns before a stand runs out.

Try it:            saprolite demo
Begin your own:    saprolite init stands.geojson
                   saprolite check
                   saprolite load history.csv
                   saprolite run
Look at a stand:   saprolite show north-slope
Over a history:    saprolite hindcast --stands stands.geojson --history history.csv --daily daily.csv`,
		SilenceUsage:  true,
		SilenceErrors: true,
		Version:       version(),
		Args:          cobra.NoArgs,
		RunE:          func(cmd *cobra.Command, _ []string) error { return cmd.Help() },
	}
	root.SetFlagErrorFunc(func(cmd *cobra.Command, err error) error {
		return usage(cmd, err)
	})
	root.AddCommand(newDemo(), newInit(), newCheck(), newRun(), newLoad(), newShow(), newHindcast())
	for _, c := range append(root.Commands(), root) {
		wrapUsage(c)
	}
	return root
}

// usage makes an error of the command line: exit code 64 and where to read on.
func usage(cmd *cobra.Command, err error) error {
	return exitWith(exitUsage, &usageError{err, cmd.CommandPath()})
}

type usageError struct {
	err     error
	command string
}

func (e *usageError) Error() string {
	return e.err.Error() + "\nSee: " + e.command + " --help"
}

// wrapUsage makes wrong arguments end with 64 too.
func wrapUsage(c *cobra.Command) {
	args := c.Args
	if args == nil {
		return
	}
	c.Args = func(cmd *cobra.Command, given []string) error {
		if err := args(cmd, given); err != nil {
			return usage(cmd, err)
		}
		return nil
	}
}

// version is what the build knows of itself.
func version() string {
	info, ok := debug.ReadBuildInfo()
	if !ok || info.Main.Version == "" || info.Main.Version == "(devel)" {
		return "development"
	}
	return info.Main.Version
}
