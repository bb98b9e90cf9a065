package config

import (
	"bytes"
	"encoding/json"
	"fmt"
	"log/slog"
	"math"
	"net/netip"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"saprolite/detectors/finding"
	"saprolite/ingest/quantity"
)

var (
	secrets          = cmp.AllowUnexported(Secret{})
	unplacedSettings = cmpopts.IgnoreUnexported(Config{}) // where things are written: TestTogether
)

func TestSettings(t *testing.T) {
	t.Setenv("CREDENTIALS_DIRECTORY", "")
	got, err := Load("testdata/alder.good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	want := &Config{
		File: "testdata/alder.good.yaml", Place: "Alder Hollow",
		Data: "/var/lib/saprolite", Stands: filepath.Join("testdata", "alder.good.geojson"),
		Broker: Broker{Embedded: &Embedded{Listen: "[::1]:4333", MaxStore: 500_000_000, Relaxed: true}},
		Feeds:  []Feed{{"loggers", "nats", Secret{"invented-feed-password"}}},
		HTTP:   HTTP{"0.0.0.0:9000"},
		Limits: []Limit{
			{"", "air_temperature", -35, 45},
			{"gauge-2", "air_temperature", -20, nan},
			{"gauge-2", "precipitation", nan, 120},
		},
		Thresholds: Thresholds{
			StoreLow:   StoreLow{[4]float64{0.40, 0.30, 0.10, 0.03}, 5, 7},
			FeedSilent: FeedSilent{3, 14},
		},
		Destinations: []Destination{
			{
				Name: "forester", Kinds: []string{"store-low"}, Groups: []string{"Upper Alder"}, Levels: []string{"nearly spent", "spent"},
				Mail: &Mail{
					Server: "mail.example.org:587", From: "saprolite@example.org", To: []string{"forester@example.org", "ranger@example.org"},
					Username: "saprolite", Password: Secret{"abc-invented-mail-password"},
				},
			},
			{
				Name:    "control-room",
				Webhook: &Webhook{"http://127.0.0.1:8080/hook", Secret{"whsec_AAECAwQFBgcICQoLDA0ODxAREhMUFRYXGBkaGxwdHh8="}, []netip.Prefix{netip.MustParsePrefix("10.1.0.0/16"), netip.MustParsePrefix("fd12:3456::/32")}},
			},
		},
	}
	if diff := cmp.Diff(want, got, secrets, unplacedSettings, cmpopts.EquateNaNs(), cmpopts.EquateComparable(netip.Prefix{})); diff != "" {
		t.Errorf("-want +got:\n%s", diff)
	}
	for _, c := range []struct {
		source    string
		low, high float64
	}{{"gauge-2", -20, 45}, {"gauge-1", -35, 45}} {
		if low, high := got.Limit(c.source, quantity.AirTemperature); low != c.low || high != c.high {
			t.Errorf("%s: limits %v to %v, want %v to %v", c.source, low, high, c.low, c.high)
		}
	}
	if low, high := got.Limit("gauge-1", quantity.NDVI); !math.IsNaN(low) || !math.IsNaN(high) {
		t.Errorf("ndvi: limits %v to %v, want none", low, high)
	}
}

// TestDefaults: an empty file, and Default, give what the design says.
func TestDefaults(t *testing.T) {
	got, err := Load("testdata/empty.good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	want := &Config{
		File: "testdata/empty.good.yaml", Place: "forest", Data: "testdata/saprolite-data", Stands: "testdata/stands.geojson",
		Broker: Broker{Embedded: &Embedded{Listen: "127.0.0.1:4222", MaxStore: 8 << 30}},
		HTTP:   HTTP{"127.0.0.1:9464"},
		Thresholds: Thresholds{
			StoreLow:   StoreLow{[4]float64{0.40, 0.25, 0.10, 0.03}, 3, 7},
			FeedSilent: FeedSilent{3, 10},
		},
	}
	if diff := cmp.Diff(want, got, secrets, unplacedSettings); diff != "" {
		t.Errorf("-want +got:\n%s", diff)
	}
	if diff := cmp.Diff(want, Default("testdata"), secrets, unplacedSettings, cmpopts.IgnoreFields(Config{}, "File")); diff != "" {
		t.Errorf("Default -want +got:\n%s", diff)
	}
}

func TestMissingFile(t *testing.T) {
	if _, err := Load("testdata/absent.yaml"); !os.IsNotExist(unwrap(err)) {
		t.Errorf("%v, want not exist", err)
	}
	if _, err := LoadRegister("testdata/absent.geojson"); !os.IsNotExist(unwrap(err)) {
		t.Errorf("%v, want not exist", err)
	}
}

func unwrap(err error) error {
	if w, ok := err.(interface{ Unwrap() error }); ok {
		return w.Unwrap()
	}
	return err
}

// TestWordsAgree: the words of filters are those of the findings themselves.
func TestWordsAgree(t *testing.T) {
	for _, k := range []finding.Kind{finding.StoreLow, finding.FeedSilent} {
		if !slices.Contains(kinds, string(k)) {
			t.Errorf("kind %q is not known to filters", k)
		}
	}
	for _, l := range levels {
		if finding.Level(l).Rank() == 0 {
			t.Errorf("level %q is no finding's", l)
		}
	}
	for _, l := range []finding.Level{finding.DrawingDown, finding.Low, finding.NearlySpent, finding.Spent, finding.Silent, finding.Blind} {
		if !slices.Contains(levels, string(l)) {
			t.Errorf("level %q is not known to filters", l)
		}
	}
}

// TestSecretsStaySecret plants a secret and prints it every way there is.
func TestSecretsStaySecret(t *testing.T) {
	const planted = "abc-invented-mail-password"
	c, err := Load("testdata/alder.good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	m := c.Destinations[0].Mail
	if m.Password.Reveal() != planted {
		t.Fatalf("the secret is %q", m.Password.Reveal())
	}
	var out bytes.Buffer
	for _, verb := range []string{"%v", "%+v", "%#v", "%s", "%q", "%x", "%d"} {
		fmt.Fprintf(&out, verb+verb+verb+"\n", m, *m, m.Password)
	}
	fmt.Fprintln(&out, m.Password, &m.Password, m.Password.String(), m.Password.GoString())
	if err := json.NewEncoder(&out).Encode(c.Destinations); err != nil {
		t.Fatal(err)
	}
	slog.New(slog.NewJSONHandler(&out, nil)).Info("settings", "password", m.Password)
	if strings.Contains(out.String(), planted) || strings.Contains(out.String(), fmt.Sprintf("%x", planted)) {
		t.Errorf("the secret shows:\n%s", out.String())
	}
	if !strings.Contains(out.String(), redacted) {
		t.Error("nothing was printed at all")
	}
}

func TestCredentialsDirectory(t *testing.T) {
	credentials, here := t.TempDir(), t.TempDir()
	write := func(dir, name, text string) {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	write(credentials, "both", "from systemd\n")
	write(here, "both", "beside\n")
	write(here, "one", "beside\r\n")
	yaml := filepath.Join(here, "saprolite.yaml")
	write(here, "saprolite.yaml", "feeds:\n  - {name: a, credentials: both}\n  - {name: b, credentials: one}\n  - {name: c, credentials: "+filepath.Join(here, "both")+"}\n")
	t.Setenv("CREDENTIALS_DIRECTORY", credentials)
	c, err := Load(yaml)
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range []string{"from systemd", "beside", "beside"} {
		if got := c.Feeds[i].Credentials.Reveal(); got != want {
			t.Errorf("feed %s: %q, want %q", c.Feeds[i].Name, got, want)
		}
	}
}

func TestDuration(t *testing.T) {
	for text, want := range map[string]time.Duration{
		"10min": 10 * time.Minute, "1h": time.Hour, "1d": 24 * time.Hour, "1.5d": 36 * time.Hour, "1h30m": 90 * time.Minute, "0.5 min": 30 * time.Second,
	} {
		if got, err := parseDuration(text); err != nil || got != want {
			t.Errorf("%q: %v %v, want %v", text, got, err, want)
		}
	}
	for _, text := range []string{"", "d", "min", "10", "ten min", "1w", "NaNd", "1e9d", "1d12h"} {
		if got, err := parseDuration(text); err == nil {
			t.Errorf("%q: %v, want an error", text, got)
		}
	}
}

func TestTogether(t *testing.T) {
	r := load(t, "testdata/alder.good.geojson")
	c, err := Load("testdata/alder.good.yaml")
	if err != nil {
		t.Fatal(err)
	}
	if p := Together(c, r); p != nil {
		t.Errorf("%v, want none", p)
	}
	if r.Source("gauge-1").Feed != "loggers" {
		t.Fatal("gauge-1 does not come by the feed loggers")
	}
	c, err = parse("testdata/crossed.yaml", []byte(`destinations:
  - name: forester
    mail: {server: "127.0.0.1:25", from: a@example.org, to: b@example.org, tls: none}
    groups: [Upper Alder,
             Uper Alder]
  - name: warden
    mail: {server: "127.0.0.1:25", from: a@example.org, to: b@example.org, tls: none}
    groups: Ridge
limits:
  gauge-9:
    precipitation: {high: 120}
    air_temperature: {high: 45}
`), "")
	if err != nil {
		t.Fatal(err)
	}
	want := strings.Join([]string{
		`testdata/alder.good.geojson:45: source gauge-1: feed: no feed "loggers" in testdata/crossed.yaml; add it under feeds there, or correct the name`,
		`testdata/crossed.yaml:5:14: destination forester: group Uper Alder: no stand in testdata/alder.good.geojson is in it; did you mean "Upper Alder"?`,
		`testdata/crossed.yaml:8:13: destination warden: group Ridge: no stand in testdata/alder.good.geojson is in it; known here: Upper Alder, ridge road`,
		`testdata/crossed.yaml:10:3: limits.gauge-9: no such source in testdata/alder.good.geojson; correct the name, or remove it`,
	}, "\n")
	if diff := cmp.Diff(want, Together(c, r).Error()); diff != "" {
		t.Errorf("-want +got:\n%s", diff)
	}
}

// TestLoadBoth: the mistakes of both files are told at once, unless it is not
// known which stands file is meant.
func TestLoadBoth(t *testing.T) {
	t.Setenv("CREDENTIALS_DIRECTORY", "")
	c, r, err := LoadBoth("testdata/alder.good.yaml")
	if err != nil || c.Place != "Alder Hollow" || len(r.Stands) == 0 {
		t.Fatalf("%+v, %v", c, err)
	}
	dir := t.TempDir()
	for name, text := range map[string]string{
		"bad.geojson":    `{"type": "FeatureCollection", "features": [{"type": "Feature", "id": "North", "geometry": null, "properties": {}}]}`,
		"stands.geojson": `{"type": "FeatureCollection"}`,
	} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	for name, test := range map[string]struct {
		text      string
		says, not []string
	}{
		"both":      {"stands: bad.geojson\nplase: Corrow\n", []string{"both.yaml:2:1: plase", "bad.geojson:1", `"North"`, "geometry"}, nil},
		"default":   {"plase: Corrow\n", []string{"default.yaml:1:1: plase", "stands.geojson:1", "features"}, nil},
		"only-one":  {"stands: bad.geojson\n", []string{"bad.geojson:1"}, []string{"only-one.yaml:"}},
		"absent":    {"stands: absent.geojson\nplase: Corrow\n", []string{"absent.yaml:2:1: plase", "absent.geojson"}, nil},
		"not-text":  {"stands: 12\n", []string{"not-text.yaml:1:9: stands"}, []string{"stands.geojson:"}},
		"not-yaml":  {"stands: [bad.geojson\n", []string{"not-yaml.yaml:1", "not YAML"}, []string{"geojson:"}},
		"not-there": {"", []string{"not-there.yaml"}, []string{"geojson"}},
	} {
		file := filepath.Join(dir, name+".yaml")
		if name != "not-there" {
			if err := os.WriteFile(file, []byte(test.text), 0o600); err != nil {
				t.Fatal(err)
			}
		}
		c, r, err := LoadBoth(file)
		if err == nil || c != nil || r != nil {
			t.Errorf("%s: no error", name)
			continue
		}
		for _, s := range test.says {
			if !strings.Contains(err.Error(), s) {
				t.Errorf("%s does not say %q:\n%v", name, s, err)
			}
		}
		for _, s := range test.not {
			if strings.Contains(err.Error(), s) {
				t.Errorf("%s says %q:\n%v", name, s, err)
			}
		}
	}
	// The default's name is a guess when the settings are wrong: its absence is
	// no second mistake.
	lone := filepath.Join(t.TempDir(), "lone.yaml")
	if err := os.WriteFile(lone, []byte("stnds: mine.geojson\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, _, err := LoadBoth(lone); err == nil || strings.Contains(err.Error(), "stands.geojson") || !strings.Contains(err.Error(), `"stands"`) {
		t.Errorf("%v", err)
	}
}

// TestStarter: what init writes loads as it is, and with every example taken
// out of its comment.
func TestStarter(t *testing.T) {
	r := load(t, "testdata/alder.good.geojson")
	text := Starter(r, `my "best" stands.geojson`)
	c, err := parse("testdata/saprolite.yaml", text, "")
	if err != nil {
		t.Fatalf("%v\n%s", err, text)
	}
	if c.Stands != filepath.Join("testdata", `my "best" stands.geojson`) || len(c.Feeds) != 1 || c.Feeds[0].Name != "loggers" {
		t.Errorf("%+v", c)
	}
	want := Default("testdata")
	if diff := cmp.Diff(want, c, secrets, unplacedSettings, cmpopts.IgnoreFields(Config{}, "File", "Stands", "Feeds")); diff != "" {
		t.Errorf("the starter changes a default -want +got:\n%s", diff)
	}

	example := regexp.MustCompile(`(?m)^( *)# (  |[a-z]+: ?$|[a-z]+: |  - )(.*)$`)
	full := example.ReplaceAllString(string(text), "$1$2$3")
	first, rest, _ := strings.Cut(full, "# Or in a server") // the second broker section
	_, rest, _ = strings.Cut(rest, "\n\n")
	c, err = parse("testdata/saprolite.yaml", []byte(first+"\n"+rest), "")
	if err != nil {
		t.Fatalf("with its examples: %v\n%s", err, full)
	}
	if len(c.Limits) != 2 || len(c.Destinations) != 2 || c.Destinations[0].Mail == nil || c.Destinations[1].Webhook == nil || !c.Feeds[0].Credentials.Set() || c.Destinations[0].Groups[0] != "Upper Alder" {
		t.Errorf("with its examples: %+v", c)
	}
	if p := Together(c, r); p != nil {
		t.Errorf("with its examples: %v", p)
	}
}

func seeds(t testing.TB, pattern string) (out [][]byte) {
	files, err := filepath.Glob(pattern)
	if err != nil || len(files) == 0 {
		t.Fatalf("no seeds in %s: %v", pattern, err)
	}
	for _, file := range files {
		data, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		out = append(out, data)
	}
	return out
}

func FuzzConfig(f *testing.F) {
	for _, data := range seeds(f, "testdata/*.yaml") {
		f.Add(data)
	}
	f.Add(Starter(&Register{}, "stands.geojson"))
	f.Fuzz(func(t *testing.T, data []byte) {
		c, err := parse("testdata/saprolite.yaml", data, "")
		if err != nil {
			wellFormed(t, err)
			return
		}
		if (c.Broker.Embedded == nil) == (c.Broker.Remote == nil) || c.Place == "" || c.Data == "" || c.Stands == "" || c.HTTP.Listen == "" {
			t.Fatalf("%+v", c)
		}
		for _, d := range c.Destinations {
			if (d.Mail == nil) == (d.Webhook == nil) {
				t.Fatalf("%+v", d)
			}
			if d.Mail != nil && (len(d.Mail.To) == 0 || strings.ContainsAny(strings.Join(d.Mail.To, "")+d.Mail.From, "\r\n")) {
				t.Fatalf("%+v", d.Mail)
			}
		}
	})
}
