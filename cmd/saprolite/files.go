package main

import (
	"errors"

	"github.com/spf13/cobra"

	"saprolite/config"
)

// configFlag is the flag by which a command finds saprolite.yaml.
func configFlag(c *cobra.Command, file *string) {
	c.Flags().StringVar(file, "config", "saprolite.yaml", "settings file; it names the stands file and the data folder")
}

// readBoth reads saprolite.yaml and the stands file it names, and says all
// that is wrong with either.
func readBoth(configFile string) (*config.Config, *config.Register, error) {
	cfg, err := config.Load(configFile)
	if err != nil {
		return nil, nil, exitWith(exitConfiguration, err)
	}
	reg, err := config.LoadRegister(cfg.Stands)
	if err != nil {
		return nil, nil, exitWith(exitConfiguration, err)
	}
	if problems := config.Together(cfg, reg); len(problems) > 0 {
		return nil, nil, exitWith(exitConfiguration, errors.Join(problems))
	}
	return cfg, reg, nil
}
