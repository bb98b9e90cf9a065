package main

import (
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"saprolite/config"
)

// Exit codes are a contract (design 5.9), and so is that an error says what
// to do.
func TestExitCodes(t *testing.T) {
	dir := t.TempDir()
	stands, history := seattleFiles(t, dir, "")
	settings := write(t, dir, "good.yaml", "stands: stands.geojson\nbroker: {embedded: {listen: \"127.0.0.1:0\"}}\n")
	badSettings := write(t, dir, "bad.yaml", "stands: stands.geojson\nplase: Corrow\n")
	badStands := write(t, dir, "bad.geojson", `{"type": "FeatureCollection", "features": [{"type": "Feature", "id": "North", "geometry": null, "properties": {}}]}`)
	bothBad := write(t, dir, "both.yaml", "stands: bad.geojson\nplase: Corrow\n")
	crossed := write(t, dir, "crossed.yaml", "stands: stands.geojson\nlimits:\n  portland: {precipitation: {high: 200}}\n")
	badHistory := write(t, dir, "bad.csv", "source,quantity,start,value,unit\nseattle,precipitation,2012-01-01,3,mm\nseattle,rain,2012-01-02,3,mm\nnowhere,precipitation,2012-01-02,3,mm\nseattle,precipitation,2012-01-03,-3,mm\n")
	noHistory := write(t, dir, "empty.csv", "source,quantity,start,value,unit\n")
	for _, c := range []struct {
		args []string
		code int
		says []string
	}{
		{[]string{"--help"}, 0, []string{"saprolite demo"}},
		{[]string{"--version"}, 0, []string{"saprolite"}},
		{[]string{"check", "--config", settings}, 0, []string{"are right"}},
		{[]string{"check", "--quiet", "--config", settings}, 0, nil},
		{[]string{"water"}, exitUsage, []string{`"water"`, "--help"}},
		{[]string{"run", "--fast"}, exitUsage, []string{"unknown flag", "saprolite run --help"}},
		{[]string{"show", "--config", settings}, exitUsage, []string{"saprolite show --help"}},
		{[]string{"show", "sea", "--config", settings}, exitUsage, []string{"do you mean seattle?"}},
		{[]string{"hindcast", "--stands", stands}, exitUsage, []string{"--history"}},
		{[]string{"hindcast", "--stands", stands, "--history", history, "--to", "1.5.2013"}, exitUsage, []string{"--to", "YYYY-MM-DD"}},
		{[]string{"run", "--log-level", "loud"}, exitUsage, []string{"debug, info, warn or error"}},
		{[]string{"check", "--config", badSettings}, exitConfiguration, []string{"bad.yaml:2", "plase", "place"}},
		{[]string{"check", "--config", bothBad}, exitConfiguration, []string{"both.yaml:2", "plase", "bad.geojson:1", "North"}},
		{[]string{"run", "--config", bothBad}, exitConfiguration, []string{"both.yaml:2", "plase", "bad.geojson:1", "North"}},
		{[]string{"hindcast", "--stands", stands, "--history", history, "--config", crossed}, exitConfiguration, []string{"crossed.yaml:3:3", "limits.portland", "no such source"}},
		{[]string{"check", "--config", filepath.Join(dir, "none.yaml")}, exitConfiguration, []string{"none.yaml"}},
		{[]string{"init", badStands, "--config", filepath.Join(dir, "new.yaml")}, exitConfiguration, []string{"bad.geojson:1", "North"}},
		{[]string{"hindcast", "--stands", stands, "--history", filepath.Join(dir, "none.csv")}, exitData, []string{"none.csv"}},
		{[]string{"hindcast", "--stands", stands, "--history", noHistory}, exitData, []string{"no usable observation"}},
		{[]string{"hindcast", "--stands", stands, "--history", badHistory}, exitData,
			[]string{"bad.csv: line 3", `"rain"`, "precipitation", "bad.csv: line 4", "nowhere", "bad.csv: line 5", "check unit and sign", "could not be used: 3"}},
		{[]string{"load", badHistory, "--config", settings}, exitData, []string{"bad.csv: line 3", "bad.csv: line 4", "could not be used: 3"}},
	} {
		t.Run(strings.Join(c.args[:1], " ")+fmt.Sprint(" ", c.code), func(t *testing.T) {
			code, out, errs := call(t, c.args...)
			if code != c.code {
				t.Errorf("saprolite %s: exit %d, want %d\n%s%s", strings.Join(c.args, " "), code, c.code, out, errs)
			}
			for _, s := range c.says {
				if !strings.Contains(out+errs, s) {
					t.Errorf("saprolite %s does not say %q:\n%s%s", strings.Join(c.args, " "), s, out, errs)
				}
			}
			if c.code != 0 && strings.Count(errs, "saprolite: ") != 1 {
				t.Errorf("the error is not said once:\n%s", errs)
			}
		})
	}
}

// A port that is taken is a matter of configuration and says which.
func TestTakenPort(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	dir := t.TempDir()
	seattleFiles(t, dir, "")
	for name, settings := range map[string]string{
		"broker": "broker: {embedded: {listen: \"" + l.Addr().String() + "\"}}\nhttp: {listen: \"127.0.0.1:0\"}\n",
		"http":   "broker: {embedded: {listen: \"127.0.0.1:0\"}}\nhttp: {listen: \"" + l.Addr().String() + "\"}\n",
	} {
		file := write(t, dir, name+".yaml", "data: data-"+name+"\nstands: stands.geojson\n"+settings)
		code, _, errs := call(t, "run", "--config", file)
		if code != exitConfiguration || !strings.Contains(errs, l.Addr().String()) {
			t.Errorf("%s: exit %d: %s", name, code, errs)
		}
	}
}

// init writes a file that check accepts, and leaves one that exists alone.
func TestInit(t *testing.T) {
	dir := t.TempDir()
	stands, _ := seattleFiles(t, dir, "")
	file := filepath.Join(dir, "saprolite.yaml")
	code, out, errs := call(t, "init", stands, "--config", file)
	if code != 0 || !strings.Contains(out, "one more: a rain gauge") {
		t.Fatalf("exit %d\n%s%s", code, out, errs)
	}
	if _, err := config.Load(file); err != nil {
		t.Error(err)
	}
	if code, _, errs := call(t, "check", "--config", file); code != 0 {
		t.Errorf("check: exit %d: %s", code, errs)
	}
	before := read(t, file) + "# mine\n"
	if err := os.WriteFile(file, []byte(before), 0o644); err != nil {
		t.Fatal(err)
	}
	if code, out, _ := call(t, "init", stands, "--config", file); code != 0 || !strings.Contains(out, "left as it was") {
		t.Errorf("exit %d\n%s", code, out)
	}
	if read(t, file) != before {
		t.Error("a file that was there has been written over")
	}
}

// check says what was given for nothing: whoever wrote it would take it to be
// in the account.
func TestCheckSaysWhatIsNotUsed(t *testing.T) {
	dir := t.TempDir()
	feature := func(id, properties string) string {
		return `{"type": "Feature", "id": "` + id + `", "geometry": {"type": "Point", "coordinates": [8, 46]}, "properties": {` + properties + `}}`
	}
	file := func(name string, features ...string) string {
		write(t, dir, name+".geojson", `{"type": "FeatureCollection", "features": [`+strings.Join(features, ",\n")+`]}`)
		return write(t, dir, name+".yaml", "stands: "+name+".geojson\n")
	}
	given := file("given",
		feature("a", `"name": "A", "interception_share": 0.2, "species": ["oak"], "canopy_cover": 0.8, "priority": 2, "p50_mpa": -3, "p88_mpa": -5`),
		feature("b", `"name": "B", "interception_share": 0.1, "turgor_loss_mpa": -2`),
		feature("gauge", `"source": true, "latency": "1d", "quantities": ["precipitation"]`))
	code, out, errs := call(t, "check", "--config", given)
	if code != 0 || errs != "" {
		t.Fatalf("exit %d\n%s", code, errs)
	}
	for _, want := range []string{
		"\nread and checked, not used in this version: interception_share (2 stands), species (1 stand), canopy_cover (1 stand), priority (1 stand), turgor_loss_mpa (1 stand), p50_mpa (1 stand), p88_mpa (1 stand), latency (1 source)\n",
		"\nwarning: the account is computed without interception_share; ",
		"interception_store_mm, 1.5 mm where it is not given\n",
	} {
		if !strings.Contains(out, want) {
			t.Errorf("does not say %q:\n%s", want, out)
		}
	}
	some := file("some", feature("a", `"name": "A", "priority": 1`))
	if _, out, _ := call(t, "check", "--config", some); !strings.Contains(out, "version: priority (1 stand)\n") || strings.Contains(out, "warning") {
		t.Errorf("with priority alone:\n%s", out)
	}
	none := file("none", feature("a", `"name": "A", "storage_limit_mm": 200`))
	if _, out, _ := call(t, "check", "--config", none); strings.Contains(out, "not used") || strings.Contains(out, "warning") {
		t.Errorf("with nothing unused:\n%s", out)
	}
}
