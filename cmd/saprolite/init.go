package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"github.com/spf13/cobra"

	"saprolite/config"
)

func newInit() *cobra.Command {
	var file string
	c := &cobra.Command{
		Use:   "init STANDS.geojson",
		Short: "Write a commented saprolite.yaml and say what can be answered, stand by stand",
		Long: `Reads a register of stands (GeoJSON) and writes a commented saprolite.yaml that
works as it is. Then it says for each stand what can be answered with the sources
it has, and what one more would add.

The smallest register is a FeatureCollection with one stand:
  {"type": "FeatureCollection", "features": [
    {"type": "Feature", "id": "north-slope",
     "geometry": {"type": "Point", "coordinates": [-28.41, 36.21]},
     "properties": {"name": "North Slope"}}]}`,
		Example: `  saprolite init stands.geojson
  saprolite init forest/stands.geojson --config forest/saprolite.yaml`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error { return runInit(cmd, args[0], file) },
	}
	c.Flags().StringVar(&file, "config", "saprolite.yaml", "settings file to write; one that exists is left alone")
	return c
}

func runInit(cmd *cobra.Command, stands, file string) error {
	reg, err := config.LoadRegister(stands)
	if err != nil {
		return exitWith(exitConfiguration, err)
	}
	out := cmd.OutOrStdout()
	err = writeNew(file, config.Starter(reg, relative(file, stands)))
	switch {
	case errors.Is(err, fs.ErrExist):
		fmt.Fprintf(out, "%s is there already and was left as it was.\n\n", file)
	case err != nil:
		return exitWith(exitConfiguration, fmt.Errorf("write %s: %w", file, err))
	default:
		fmt.Fprintf(out, "Wrote %s. Next: saprolite check, saprolite load HISTORY.csv, saprolite run.\n\n", file)
	}
	for i := range reg.Stands {
		fmt.Fprintln(out, reg.Coverage(&reg.Stands[i]))
	}
	return nil
}

func writeNew(file string, data []byte) error {
	f, err := os.OpenFile(file, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o640)
	if err != nil {
		return err
	}
	_, err = f.Write(data)
	return errors.Join(err, f.Close())
}

// relative is the stands file as saprolite.yaml names it: by the way from its
// own folder, if there is one.
func relative(file, stands string) string {
	from, err := filepath.Abs(filepath.Dir(file))
	if err != nil {
		return stands
	}
	to, err := filepath.Abs(stands)
	if err != nil {
		return stands
	}
	way, err := filepath.Rel(from, to)
	if err != nil {
		return to
	}
	return filepath.ToSlash(way)
}
