package main

import (
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
)

// pure are the folders whose packages give the same for the same, always.
var pure = []string{"detectors", "cmd/saprolite/engine", "ingest/quantity", "ingest/observation", "ingest/wire", "ingest/daybook"}

// fromSeed is what of math/rand/v2 needs a seed, or is a type; the rest draws
// from chance itself.
var fromSeed = []string{"New", "NewPCG", "NewChaCha8", "NewZipf", "Rand", "Source", "PCG", "ChaCha8", "Zipf"}

// clocks are what of package time reads the clock or waits for it.
var clocks = []string{"Now", "Since", "Until", "After", "AfterFunc", "Tick", "NewTimer", "NewTicker", "Sleep"}

// unfinished marks what should be an issue, not a comment. It is written so
// that it does not find itself.
var unfinished = regexp.MustCompile(`\b(TO` + `DO|FIX` + `ME)\b`)

// faults returns what the source of one file may not have: anywhere, and, if
// it has to be pure, there.
func faults(name, source string, isPure bool) (found []string, err error) {
	files := token.NewFileSet()
	file, err := parser.ParseFile(files, name, source, parser.ParseComments)
	if err != nil {
		return nil, err
	}
	fault := func(at token.Pos, format string, args ...any) {
		found = append(found, fmt.Sprintf("%s: %s", files.Position(at), fmt.Sprintf(format, args...)))
	}
	for _, group := range file.Comments {
		if word := unfinished.FindString(group.Text()); word != "" {
			fault(group.Pos(), "%s: unfinished work is an issue, not a comment", word)
		}
	}
	if strings.HasSuffix(name, "_test.go") {
		return found, nil
	}
	imported := map[string]string{} // path by the name it has in this file
	for _, i := range file.Imports {
		p := strings.Trim(i.Path.Value, `"`)
		name := path.Base(strings.TrimSuffix(p, "/v2"))
		if i.Name != nil {
			name = i.Name.Name
		}
		imported[name] = p
		if name == "." {
			fault(i.Pos(), "dot import of %s: nobody sees where a name comes from", p)
		}
	}
	ast.Inspect(file, func(n ast.Node) bool {
		switch n := n.(type) {
		case *ast.FuncDecl:
			if n.Recv == nil && n.Name.Name == "init" {
				fault(n.Pos(), "init: nothing happens on import; give it to whoever needs it")
			}
		case *ast.SelectorExpr:
			if x, ok := n.X.(*ast.Ident); ok {
				if why := forbidden(imported[x.Name], n.Sel.Name, isPure); why != "" {
					fault(n.Pos(), "%s.%s: %s", x.Name, n.Sel.Name, why)
				}
			}
		case *ast.GoStmt:
			if isPure {
				fault(n.Pos(), "go statement: the order of goroutines is chance")
			}
		case *ast.ChanType:
			if isPure {
				fault(n.Pos(), "channel: there is nobody to talk to in a pure package")
			}
		}
		return true
	})
	return found, nil
}

// forbidden says why a name of an imported package may not be used.
func forbidden(imported, name string, isPure bool) string {
	switch {
	case imported == "fmt" && strings.HasPrefix(name, "Print"):
		return "prints past whoever called; take an io.Writer, or return it"
	case !isPure:
		return ""
	case imported == "time" && slices.Contains(clocks, name):
		return "reads the clock; time is an argument"
	case imported == "os":
		return "reaches outside; take what is needed as an argument"
	case imported == "math/rand", imported == "math/rand/v2" && !slices.Contains(fromSeed, name):
		return "draws without a seed; the same must give the same"
	}
	return ""
}

func TestSource(t *testing.T) {
	files := 0
	err := filepath.WalkDir(top, func(name string, e fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if e.IsDir() {
			if n := e.Name(); n == "testdata" || n != ".." && strings.HasPrefix(n, ".") {
				return fs.SkipDir
			}
			return nil
		}
		if filepath.Ext(name) != ".go" {
			return nil
		}
		files++
		inside, err := filepath.Rel(top, name)
		if err != nil {
			return err
		}
		inside = filepath.ToSlash(inside)
		found, err := faults(inside, read(t, name), slices.ContainsFunc(pure, func(dir string) bool { return strings.HasPrefix(inside, dir+"/") }))
		for _, f := range found {
			t.Error(f)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	if files < 100 {
		t.Errorf("only %d files were looked at: is %s still the top of the house?", files, top)
	}
	for _, dir := range pure {
		if _, err := os.Stat(filepath.Join(top, dir)); err != nil {
			t.Errorf("pure folder: %v", err)
		}
	}
}

func TestSourceCanFail(t *testing.T) {
	for _, c := range []struct {
		name, body string // of a file that imports time, os, fmt and math/rand/v2
		isPure     bool
		says       string // "": nothing is wrong
	}{
		{"pure.go", "func f(t time.Time) time.Time { return t.Add(time.Hour) }", true, ""},
		{"pure.go", "func f() float64 { return chance.New(chance.NewPCG(1, 2)).Float64() }", true, ""},
		{"pure.go", "func f() string { return fmt.Sprint(1) }", true, ""},
		{"cmd.go", "func f() { go os.Exit(int(time.Now().Unix())) }", false, ""},
		{"pure_test.go", "func f() { go fmt.Println(time.Now()) }", true, ""},
		{"pure.go", "func f() time.Time { return time.Now() }", true, "pure.go:4:29: time.Now: reads the clock"},
		{"pure.go", "var f = time.Since", true, "time.Since: reads the clock"},
		{"pure.go", "func f() { go f() }", true, "go statement"},
		{"pure.go", "func f() { g := make(chan int); _ = g }", true, "channel"},
		{"pure.go", "func f() float64 { return chance.Float64() }", true, "chance.Float64: draws without a seed"},
		{"pure.go", "func f() []string { return os.Args }", true, "os.Args: reaches outside"},
		{"cmd.go", "func f() { fmt.Println() }", false, "fmt.Println: prints past"},
		{"cmd.go", "func init() {}", false, "init: nothing happens"},
		{"cmd_test.go", "// FIX" + "ME later\nfunc f() {}", false, "unfinished work"},
		{"cmd.go", "/* to be done: TO" + "DO */", false, "unfinished work"},
	} {
		source := "package p\n\nimport (\"time\"; \"os\"; \"fmt\"; chance \"math/rand/v2\")\n" + c.body
		found, err := faults(c.name, source, c.isPure)
		if err != nil {
			t.Fatal(err)
		}
		if c.says == "" && found != nil || c.says != "" && (len(found) != 1 || !strings.Contains(found[0], c.says)) {
			t.Errorf("%s: found %q, want %q", c.body, found, c.says)
		}
	}
}
