package config

import (
	"fmt"
	"os"
	"path/filepath"
)

// Config is saprolite.yaml (design 5.10), every default filled in. Paths are
// as the operating system takes them: relative ones have been joined to the
// folder of the yaml file.
type Config struct {
	File         string
	Place        string // shown in messages, and part of every episode's id
	Data         string // folder of the store
	Stands       string // the register's file
	Broker       Broker
	Feeds        []Feed
	HTTP         HTTP
	Limits       []Limit
	Thresholds   Thresholds
	Destinations []Destination

	// places is where stands what Together looks at, by its field in a problem.
	places map[string]place
}

// Feed is one way in with its own name, account and permissions.
type Feed struct {
	Name        string
	Kind        string // nats
	Credentials Secret // its password at the embedded broker; unset for none
}

// HTTP is where /metrics, /healthz and /readyz are served.
type HTTP struct{ Listen string }

// Defaults, each with its source.
const (
	DefaultPlace  = "forest"         // a name must be there; any will do
	DefaultData   = "saprolite-data" // beside saprolite.yaml: nothing to set up
	DefaultStands = "stands.geojson" // the name used throughout the documentation
	DefaultListen = "127.0.0.1:4222" // loopback; NATS' registered port (IANA)
	DefaultStore  = int64(8 << 30)   // bytes; common practice, no source: decades of packs of a thousand stands
	DefaultHTTP   = "127.0.0.1:9464" // loopback; the port OpenTelemetry gives to Prometheus exporters (from memory)
	smallestStore = int64(64 << 20)  // bytes; common practice, no source: below it a year does not fit
)

// loader is a Config while it is read.
type loader struct {
	*sheet
	dir         string // of the yaml file
	credentials string // $CREDENTIALS_DIRECTORY, or empty
	places      map[string]place
}

// Load reads saprolite.yaml. The error is Problems when the file could be
// read, and says what the operating system said when it could not.
func Load(file string) (*Config, error) {
	c, err := readSettings(file)
	if err != nil {
		return nil, err
	}
	return c, nil
}

// readSettings is Load that gives what could be read beside the problems; nil if
// nothing could.
func readSettings(file string) (*Config, error) {
	data, err := os.ReadFile(file)
	if err != nil {
		return nil, fmt.Errorf("reading the settings: %w", err)
	}
	return parse(file, data, os.Getenv("CREDENTIALS_DIRECTORY"))
}

// Default returns the settings an empty saprolite.yaml in dir gives.
func Default(dir string) *Config {
	c, err := parse(filepath.Join(dir, "saprolite.yaml"), nil, "")
	if err != nil {
		panic("config: the defaults do not hold: " + err.Error()) // a bug; TestDefaults
	}
	return c
}

// parse returns what could be read beside the problems. Stands is empty when it
// is not known which file was meant.
func parse(file string, data []byte, credentials string) (*Config, error) {
	l := &loader{sheet: &sheet{file: filepath.ToSlash(file)}, dir: filepath.Dir(file), credentials: credentials, places: map[string]place{}}
	c := &Config{File: file, places: l.places}
	if root, ok := l.parseYAML(data); ok {
		l.config(c, l.section(&root, ""))
	}
	return c, l.err()
}

func (l *loader) config(c *Config, top *section) {
	c.Place = top.text("place", DefaultPlace, oneLine)
	c.Data = l.path(top.text("data", DefaultData, oneLine))
	if stands := top.text("stands", "", oneLine); stands != "" {
		c.Stands = l.path(stands)
		l.places["stands"] = top.node.get("stands").at
	} else if top.node.get("stands") == nil && !top.wrong {
		c.Stands = l.path(DefaultStands)
	}
	c.Broker = l.broker(top)
	c.Feeds = l.feeds(top)
	c.HTTP = l.http(top)
	metrics, _ := top.open("metrics")
	metrics.done()
	c.Limits = l.limits(top)
	c.Thresholds = l.thresholds(top)
	c.Destinations = l.destinations(top)
	for _, f := range c.Feeds {
		if c.Broker.Remote != nil && f.Credentials.Set() {
			top.complainAt("feeds", fmt.Sprintf("feed %s has credentials, but a remote broker keeps its own accounts", f.Name), "remove them here and make the account there")
		}
	}
	top.done()
}

// path joins a relative path to the folder of the yaml file.
func (l *loader) path(p string) string {
	if filepath.IsAbs(p) {
		return filepath.Clean(p)
	}
	return filepath.Join(l.dir, p)
}

// placeTexts keeps where each text of a list, or a single one, is written.
func (l *loader) placeTexts(n *node, field func(text string) string) {
	if n == nil {
		return
	}
	for _, item := range append([]node{*n}, n.list()...) {
		if item.kind == text {
			l.places[field(item.text)] = item.at
		}
	}
}

// list opens each object of a property that is a list of objects.
func (l *loader) list(top *section, name string) []*section {
	n := top.of(name, list, "begin each entry with - on its own line")
	if n == nil {
		return nil
	}
	var out []*section
	items := n.list()
	for i := range items {
		out = append(out, l.section(&items[i], fmt.Sprintf("%s[%d]", name, i+1)))
	}
	return out
}

// names reads the name of each entry of a list: an id, given once.
type names map[string]int // name -> line

func (seen names) read(s *section, wanted rule[string]) string {
	s.required("name", `give it a name of a-z, 0-9, - and _`)
	name := s.text("name", "", wanted)
	if name == "" {
		return ""
	}
	at := s.node.get("name").at.line
	if line, twice := seen[name]; twice {
		s.complainAt("name", fmt.Sprintf("%q is given twice, first on line %d", name, line), "give one of them another name")
	} else {
		seen[name] = at
	}
	return name
}

func (l *loader) feeds(top *section) []Feed {
	var out []Feed
	seen := names{}
	for _, s := range l.list(top, "feeds") {
		f := Feed{Name: seen.read(s, isFeed)}
		f.Kind = s.text("kind", "nats", oneOfNow([]string{"nats"}, []string{"mqtt", "http", "files"}))
		f.Credentials = l.secret(s, "credentials")
		s.done()
		out = append(out, f)
	}
	return out
}

func (l *loader) http(top *section) HTTP {
	s, _ := top.open("http")
	s.later = []string{"access"}
	h := HTTP{Listen: s.text("listen", DefaultHTTP, address)}
	s.done()
	return h
}
