package config

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

var update = flag.Bool("update", false, "write the .want files anew; read the difference before committing it")

// TestFiles reads every file of testdata. A *.good.* one has no problem; a
// *.bad.* one has exactly those in the .want file beside it, written by hand
// or read by eye before it was kept.
func TestFiles(t *testing.T) {
	t.Setenv("CREDENTIALS_DIRECTORY", "")
	readers := map[string]func(string) error{
		"geojson": func(file string) error { _, err := LoadRegister(file); return err },
		"yaml":    func(file string) error { _, err := Load(file); return err },
	}
	for suffix, read := range readers {
		good, _ := filepath.Glob("testdata/*.good." + suffix)
		bad, _ := filepath.Glob("testdata/*.bad." + suffix)
		if len(good) == 0 || len(bad) == 0 {
			t.Fatalf("testdata has %d good and %d bad .%s files, want some of both", len(good), len(bad), suffix)
		}
		for _, file := range good {
			t.Run(filepath.Base(file), func(t *testing.T) {
				if err := read(file); err != nil {
					t.Error(err)
				}
			})
		}
		for _, file := range bad {
			t.Run(filepath.Base(file), func(t *testing.T) {
				err := read(file)
				problems, ok := err.(Problems)
				if !ok {
					t.Fatalf("got %T (%v), want Problems", err, err)
				}
				for _, p := range problems {
					if p.Cure == "" || p.Message == "" {
						t.Errorf("no message or no cure: %q", p)
					}
				}
				got := strings.ReplaceAll(err.Error(), "testdata/", "") + "\n"
				if *update {
					if err := os.WriteFile(file+".want", []byte(got), 0o644); err != nil {
						t.Fatal(err)
					}
				}
				want, err := os.ReadFile(file + ".want")
				if err != nil {
					t.Fatal(err)
				}
				if diff := cmp.Diff(string(want), got); diff != "" {
					t.Errorf("-want +got:\n%s", diff)
				}
			})
		}
	}
}
