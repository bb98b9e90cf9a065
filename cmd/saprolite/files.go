package main

import (
	"github.com/spf13/cobra"

	"saprolite/config"
)

// configFlag is the flag by which a command finds saprolite.yaml.
func configFlag(c *cobra.Command, file *string) {
	c.Flags().StringVar(file, "config", "saprolite.yaml", "settings file; it names the stands file and the data folder")
}

// readBoth reads saprolite.yaml and the stands file it names. Whatever is wrong
// with either, or with the two together, is one error and a matter of
// configuration.
func readBoth(configFile string) (*config.Config, *config.Register, error) {
	cfg, reg, err := config.LoadBoth(configFile)
	return cfg, reg, exitWith(exitConfiguration, err)
}
