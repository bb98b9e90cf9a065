package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// The house rules that a test can hold: who may import whom and what lies at
// the top. What a source file may not have is in source_test.go.

const (
	module = "saprolite"
	top    = "../.." // of the house, from here
)

// rule says what packages of the house may not import, and why. Patterns are
// separated by blanks and read as the go command reads them: ./detectors/...
// is of the house, a path with a dot in its first word is somebody else's, and
// any other is of the standard library; "foreign" is everybody else's.
//
// Own and foreign packages are banned however they come in, those of the
// standard library only where they are imported outright: fmt itself reaches
// os.
type rule struct{ of, not, but, why string }

const foreign = "foreign"

var layers = []rule{
	{"./ingest/quantity", "./... foreign", "",
		"a leaf: everybody may import it because it imports nobody"},
	{"./ingest/observation", "./... foreign", "./ingest/quantity",
		"a leaf: it knows quantities and nothing else"},
	{"./detectors/finding", "./... foreign", "./ingest/quantity",
		"a leaf: alerts may import it because it brings no detector along"},

	{"./ingest/...", "./detectors/... ./alerts/... ./config ./cmd/...", "",
		"data run one way: nothing that comes in knows what will be made of it"},
	{"./ingest/wire", "./... foreign", "./ingest/quantity ./ingest/observation",
		"a format is read and written without knowing what it is for"},
	{"./ingest/daybook", "./... foreign", "./ingest/quantity ./ingest/observation github.com/fxamacker/cbor/v2 github.com/x448/float16",
		"days are folded from observations, wherever the book is kept"},
	{"./ingest/broker", "./...", "",
		"it stores messages and books, and does not know what they mean"},
	{"./ingest/quantity ./ingest/observation ./ingest/wire ./ingest/daybook", "os net net/http log log/slog sync sync/atomic context", "",
		"numbers in, numbers out: no file, no line, no goroutine"},

	{"./detectors/...", "./... foreign", "./detectors/... ./ingest/quantity ./ingest/observation gonum.org/v1/gonum/...",
		"a stand is made of day values alone: from ingest it takes the leaves, from others only mathematics"},
	{"./detectors/...", "os io io/fs net net/http log log/slog sync sync/atomic context time math/rand crypto/rand", "",
		"pure: no clock, no input or output, no log, no goroutine, and chance only from a seed (math/rand/v2)"},
	{"./detectors/stat", "./...", "",
		"statistics know nothing of forests"},
	{"./detectors/climate", "./...", "./ingest/quantity",
		"the weather's demand does not depend on what the stand makes of it"},
	{"./detectors/ledger", "./...", "./detectors/stat ./ingest/quantity",
		"the account does not know how its weather was made nor who is told of it"},

	{"./alerts/...", "./...", "./alerts/... ./detectors/finding ./ingest/quantity ./ingest/observation",
		"alerts know findings, not how they were found; what they need of a store they say as an interface"},
	{"./alerts/...", "github.com/rs/zerolog log log/slog", "",
		"errors are returned and events reported; whoever wires them logs"},
	{"./alerts", "./alerts/... foreign os net net/http", "",
		"what is told, and when it is tried again, does not depend on the way it leaves"},
	{"./alerts/mail", "./alerts/...", "./alerts",
		"a destination knows the message and no other destination"},
	{"./alerts/webhook", "./alerts/... foreign", "./alerts",
		"a destination knows the message and no other destination"},
	{"./alerts/metrics", "./alerts/...", "",
		"metrics show a snapshot they are given; they keep no state of the program"},

	{"./config", "./...", "./ingest/quantity ./ingest/observation",
		"the operator's files are read without building anything: each part takes its own options"},
	{"./config", "github.com/rs/zerolog log log/slog net/http", "",
		"reading a file has no side effect"},

	{"./cmd/saprolite/engine", "./config ./cmd/... ./ingest/broker ./alerts/mail ./alerts/webhook ./alerts/metrics", "",
		"the same loop runs in the daemon and in a hindcast without a broker: store and record are interfaces"},
	{"./cmd/saprolite/engine", "os net net/http log log/slog sync sync/atomic context math/rand math/rand/v2", "",
		"the same messages make the same books"},
	{"./cmd/saprolite/demo", "./...", "./detectors/climate ./ingest/quantity ./ingest/observation",
		"it invents what a forest would send; the daemon that takes it in is the real one"},
	{"./cmd/saprolite", "log log/slog flag database/sql", "",
		"one way of each: zerolog, cobra, and the broker as the only store"},

	{"./ingest/quantity ./ingest/observation ./ingest/wire ./ingest/daybook ./detectors/... ./alerts/... ./config ./cmd/saprolite/engine ./cmd/saprolite/demo",
		"github.com/nats-io/... github.com/synadia-io/...", "",
		"one package knows what the store is made of: ingest/broker"},
}

// listed is one package as `go list` tells of it.
type listed struct {
	ImportPath string
	Standard   bool
	Imports    []string // outright
	Deps       []string // all
}

func (p listed) own() bool {
	return p.ImportPath == module || strings.HasPrefix(p.ImportPath, module+"/")
}

// matches tells whether a pattern of a rule means a package.
func matches(pattern string, p listed) bool {
	if pattern == foreign {
		return !p.Standard && !p.own()
	}
	if rest, own := strings.CutPrefix(pattern, "."); own {
		pattern = module + rest
	}
	if below, all := strings.CutSuffix(pattern, "/..."); all {
		return p.ImportPath == below || strings.HasPrefix(p.ImportPath, below+"/")
	}
	return p.ImportPath == pattern
}

func matchesAny(patterns string, p listed) bool {
	return slices.ContainsFunc(strings.Fields(patterns), func(s string) bool { return matches(s, p) })
}

// breaches returns every breach of the rules, every pattern that means no
// package any more, and every package of the house that no rule is about.
func breaches(rules []rule, all []listed) (found []string) {
	byPath := map[string]listed{}
	for _, p := range all {
		byPath[p.ImportPath] = p
	}
	for _, r := range rules {
		for _, pattern := range strings.Fields(r.of + " " + r.not + " " + r.but) {
			if pattern != foreign && !slices.ContainsFunc(all, func(p listed) bool { return matches(pattern, p) }) {
				found = append(found, fmt.Sprintf("%s: there is no such package; correct the table of layers", pattern))
			}
		}
		for _, p := range all {
			if !p.own() || !matchesAny(r.of, p) {
				continue
			}
			for _, d := range p.Deps {
				dep := byPath[d]
				if dep.Standard && !slices.Contains(p.Imports, d) || !matchesAny(r.not, dep) || matchesAny(r.but, dep) {
					continue
				}
				found = append(found, fmt.Sprintf("%s may not import %s%s: %s", p.ImportPath, d, through(p, d, byPath), r.why))
			}
		}
	}
	for _, p := range all {
		if p.own() && !slices.ContainsFunc(rules, func(r rule) bool { return matchesAny(r.of, p) }) {
			found = append(found, fmt.Sprintf("%s: no rule is about it; add it to the table of layers", p.ImportPath))
		}
	}
	return found
}

// through says by which of p's imports a package comes in.
func through(p listed, d string, byPath map[string]listed) string {
	if slices.Contains(p.Imports, d) {
		return ""
	}
	for _, i := range p.Imports {
		if slices.Contains(byPath[i].Deps, d) {
			return " (through " + i + ")"
		}
	}
	return ""
}

func TestLayers(t *testing.T) {
	list := exec.Command("go", "list", "-deps", "-json=ImportPath,Standard,Imports,Deps", "./...")
	list.Dir = top
	var errs bytes.Buffer
	list.Stderr = &errs
	out, err := list.Output()
	if err != nil {
		t.Fatalf("go list: %v\n%s", err, &errs)
	}
	var all []listed
	for packages := json.NewDecoder(bytes.NewReader(out)); ; {
		var p listed
		if err := packages.Decode(&p); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			t.Fatal(err)
		}
		all = append(all, p)
	}
	for _, b := range breaches(layers, all) {
		t.Error(b)
	}
}

func TestLayersCanFail(t *testing.T) {
	std := func(name string) listed { return listed{ImportPath: name, Standard: true} }
	pkg := func(name, imports, more string) listed {
		i := strings.Fields(imports)
		return listed{ImportPath: name, Imports: i, Deps: append(i, strings.Fields(more)...)}
	}
	house := []listed{
		std("fmt"), std("os"), pkg("example.org/x", "", ""), pkg("example.org/x/y", "", ""),
		pkg(module+"/leaf", "", ""),
		pkg(module+"/low", "fmt "+module+"/leaf", "os"),
		pkg(module+"/high", module+"/low", "fmt os example.org/x/y "+module+"/leaf"),
		pkg(module+"/highest", "os "+module+"/high", "fmt example.org/x/y "+module+"/low "+module+"/leaf"),
	}
	good := []rule{{"./leaf", "./... foreign", "", ""}, {"./low", "./... os", "./leaf", ""}, {"./high/... ./highest", "example.org/x", "", ""}}
	if found := breaches(good, house); found != nil {
		t.Errorf("a house in order: %s", found)
	}
	for _, c := range []struct {
		rule rule
		says string
	}{
		{rule{"./low", "./...", "", "low is low"}, "saprolite/low may not import saprolite/leaf: low is low"},
		{rule{"./high", "./leaf", "", ""}, "saprolite/high may not import saprolite/leaf (through saprolite/low)"},
		{rule{"./high", foreign, "", ""}, "saprolite/high may not import example.org/x/y"},
		{rule{"./high", "example.org/...", "", ""}, "saprolite/high may not import example.org/x/y"},
		{rule{"./highest", "os", "", ""}, "saprolite/highest may not import os"},
		{rule{"./lower", "os", "", ""}, "./lower: there is no such package"},
		{rule{"./low", "./cellar", "", ""}, "./cellar: there is no such package"},
		{rule{"./low", "example.org/z", "", ""}, "example.org/z: there is no such package"},
	} {
		found := breaches(append(good, c.rule), house)
		if len(found) != 1 || !strings.Contains(found[0], c.says) {
			t.Errorf("%+v: found %q, want %q", c.rule, found, c.says)
		}
	}
	if found := breaches(good[:2], house); len(found) != 2 || !strings.Contains(found[0], "saprolite/high: no rule is about it") {
		t.Errorf("two packages without a rule: found %q", found)
	}
}

// The top of the house is fixed (design 2); everything else goes into a room.
var topLevel = strings.Fields("cmd ingest detectors alerts config deploy README.md DEVELOPERS.md go.mod go.sum .ci .gitignore .git")

// strangers are the names at the top that do not belong there; what git is
// told to ignore may lie about.
func strangers(names []string, gitignore string) (found []string) {
	for _, name := range names {
		ignored := slices.ContainsFunc(strings.Fields(gitignore), func(pattern string) bool {
			matched, err := path.Match(strings.Trim(pattern, "/"), name)
			return matched && err == nil
		})
		if !ignored && !slices.Contains(topLevel, name) {
			found = append(found, name)
		}
	}
	return found
}

func TestTopLevel(t *testing.T) {
	entries, err := os.ReadDir(top)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range entries {
		names = append(names, e.Name())
	}
	for _, s := range strangers(names, read(t, filepath.Join(top, ".gitignore"))) {
		t.Errorf("%s does not belong at the top of the house; put it into a room", s)
	}
	ignore := "/saprolite\n*.out\nsaprolite-data/\n"
	got := strangers([]string{"cmd", "saprolite", "cpu.out", "saprolite-data", "pkg", "util.go", ".git"}, ignore)
	if !slices.Equal(got, []string{"pkg", "util.go"}) {
		t.Errorf("of a made-up top level %q are strangers, want pkg and util.go", got)
	}
}
