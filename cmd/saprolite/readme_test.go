package main

import (
	"errors"
	"io"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"saprolite/alerts"
	"saprolite/config"
	"saprolite/ingest/quantity"
	"saprolite/ingest/wire"
)

// What README.md and --help tell people to type and to write has to be right.

var (
	fenced   = regexp.MustCompile("(?ms)^```([a-z]+)\n(.*?)^```$")
	heading  = regexp.MustCompile(`(?m)^[A-Z][a-z ]+:`)  // before a command in the list of saprolite --help
	trailing = regexp.MustCompile(`\s+#.*$|\s{2,}\S.*$`) // what an example says of itself
)

// fences returns the blocks of a Markdown file in one language.
func fences(t *testing.T, file, language string) (blocks []string) {
	t.Helper()
	for _, m := range fenced.FindAllStringSubmatch(read(t, filepath.Join(top, file)), -1) {
		if m[1] == language {
			blocks = append(blocks, m[2])
		}
	}
	return blocks
}

// commands are the calls of saprolite in a shell text, each as its arguments.
func commands(text string) (calls [][]string) {
	for line := range strings.Lines(text) {
		line = trailing.ReplaceAllString(strings.TrimSpace(line), "")
		for _, how := range []string{"saprolite", "go run ./cmd/saprolite"} {
			if args, ok := strings.CutPrefix(line, how+" "); ok {
				calls = append(calls, strings.Fields(args))
			}
		}
	}
	return calls
}

// understood tells whether the program takes a command line, without running it.
func understood(args []string) error {
	c, rest, err := newRoot().Find(args)
	if err != nil {
		return err
	}
	if !c.HasParent() {
		return errors.New("no such command")
	}
	if err := c.ParseFlags(rest); err != nil {
		return err
	}
	return c.ValidateArgs(c.Flags().Args())
}

func TestCommandsThatAreWrittenDown(t *testing.T) {
	sources := map[string]string{}
	for _, file := range []string{"README.md", "DEVELOPERS.md"} {
		sources[file] = strings.Join(fences(t, file, "sh"), "")
		if len(commands(sources[file])) == 0 {
			t.Errorf("%s: no command in any of its sh blocks", file)
		}
	}
	root := newRoot()
	_, list, _ := strings.Cut(root.Long, "\n\n")
	sources["saprolite --help"] = heading.ReplaceAllString(list, "")
	for _, c := range root.Commands() {
		sources["saprolite "+c.Name()+" --help"] = c.Example
		if len(commands(c.Example)) == 0 {
			t.Errorf("saprolite %s --help teaches without an example", c.Name())
		}
		if !slices.ContainsFunc(commands(sources["README.md"]), func(args []string) bool { return args[0] == c.Name() }) {
			t.Errorf("README.md does not show saprolite %s", c.Name())
		}
	}
	for where, text := range sources {
		for _, args := range commands(text) {
			if err := understood(args); err != nil {
				t.Errorf("%s: saprolite %s: %v", where, strings.Join(args, " "), err)
			}
		}
	}
	for _, wrong := range []string{"saprolite water", "saprolite show", "saprolite run --fast", "saprolite load", "saprolite check stands.geojson"} {
		if understood(commands(wrong)[0]) == nil {
			t.Errorf("%s passes", wrong)
		}
	}
}

// The files in README.md are right, and the way it shows into a forest of
// one's own can be walked, but for the daemon itself.
func TestReadmeIsTrue(t *testing.T) {
	if readme := strings.ReplaceAll(read(t, filepath.Join(top, "README.md")), "\n> ", " "); !strings.Contains(readme, alerts.Caution) {
		t.Error("README.md does not carry the caution of every message")
	}
	dir := t.TempDir()
	geojson, csv, yaml := fences(t, "README.md", "json"), fences(t, "README.md", "csv"), fences(t, "README.md", "yaml")
	if len(geojson) != 2 || len(csv) != 1 || len(yaml) != 1 {
		t.Fatalf("README.md has %d json, %d csv and %d yaml blocks; want stands and a pack, a history, and settings", len(geojson), len(csv), len(yaml))
	}
	stands := write(t, dir, "stands.geojson", geojson[0])
	write(t, dir, "history.csv", csv[0])
	write(t, dir, "loggers.password", "a password\n")
	write(t, dir, "saprolite.yaml", yaml[0]+"broker: {embedded: {listen: \"127.0.0.1:0\"}}\n") // a port that is free here

	reg, err := config.LoadRegister(stands)
	if err != nil {
		t.Fatal(err)
	}
	gauge := reg.Source("gauge-1")
	pack, problems := wire.DecodeSenML([]byte(geojson[1]), wire.SenMLOptions{Source: gauge.ID, Received: time.Unix(2e9, 0), Interval: gauge.Interval})
	if len(problems) > 0 || len(pack) != 3 {
		t.Errorf("the pack gives %d observations and %v", len(pack), problems)
	}
	day := quantity.DateOf(2024, time.March, 3)
	for _, o := range pack {
		if !o.Start.Equal(day.Start(gauge.UTCOffset)) || !o.End.Equal(day.End(gauge.UTCOffset)) {
			t.Errorf("%s speaks for %s to %s, not for the gauge's %s", o.Quantity, o.Start, o.End, day)
		}
	}
	r, err := wire.NewCSVReader(strings.NewReader(csv[0]), "README.md")
	for err == nil {
		_, err = r.Next()
	}
	if !errors.Is(err, io.EOF) {
		t.Error(err)
	}

	seen := fences(t, "README.md", "text")[0]
	way := commands(strings.Join(fences(t, "README.md", "sh"), ""))
	t.Chdir(dir)
	walked := 0
	for _, args := range way {
		if args[0] == "run" || args[0] == "demo" && !slices.Contains(args, "--fast") {
			continue // these stay up until Ctrl-C
		}
		walked++
		code, out, errs := call(t, args...)
		if code != 0 {
			t.Errorf("saprolite %s: exit %d\n%s%s", strings.Join(args, " "), code, out, errs)
		}
		if args[0] == "demo" && !strings.Contains(out, seen) {
			t.Errorf("README.md says that one sees\n%s\nin\n%s", seen, out)
		}
	}
	if walked < 8 {
		t.Errorf("only %d commands were walked", walked)
	}
}
