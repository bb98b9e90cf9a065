package config

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"time"

	"saprolite/ingest/quantity"
)

// Register is the stands and sources of one forest, as written in a GeoJSON
// FeatureCollection (RFC 7946; design 5.2). It does not change once read, and
// may be used from many goroutines.
type Register struct {
	File   string
	Stands []Stand // in the order of the file
	// Positioned is every source written as a feature, in the order of the
	// file. Source and SourceIDs know the others too.
	Positioned []Source

	stands map[string]int                    // index into Stands
	known  map[string]Source                 // by id: whoever may speak
	nearby map[quantity.Quantity][]candidate // by base quantity
}

// Stand is one stand. Numbers that were not given are NaN.
type Stand struct {
	ID, Name            string // the name is what people call it
	Line                int    // where its feature begins
	Latitude, Longitude quantity.Degrees
	Geometry            Geometry
	Elevation           quantity.Metres // above the sea
	UTCOffset           time.Duration   // of its days: as given, else longitude/15 rounded to the hour
	Hectares            float64         // as given, else from the polygon on the sphere; NaN for a point
	Established         int             // year; 0 when not given
	CanopyCover         float64         // 0..1
	Groups              []string
	Priority            int // 1..5; 0 when not given
	StorageLimit        quantity.Millimetres
	InterceptionStore   quantity.Millimetres
	InterceptionShare   float64 // of gross precipitation, 0..1
	ETCoefficient       float64 // actual over reference evapotranspiration, unstressed
	TurgorLoss          quantity.Megapascals
	P50, P88            quantity.Megapascals
	MonthlyReferenceET  *[12]quantity.Millimetres // a month's total; nil when not given
	ExtraWater          string                    // none (also when not given), suspected or known
	Species             []Share
	Sources             map[quantity.Quantity][]string // in order of preference, as written
}

// Share is one species of a stand.
type Share struct {
	Name     string
	Fraction float64 // of basal area, 0..1; NaN when only the name was given
}

// Source is one source of observations. What was not given is NaN, zero or
// empty.
type Source struct {
	ID                  string
	Line                int // where its feature begins; 0 when it has none
	Latitude, Longitude quantity.Degrees
	Elevation           quantity.Metres // of the ground, above the sea
	Height              quantity.Metres // of the instrument, above the ground
	// UTCOffset is of the source's days: as given, else longitude/15 rounded to
	// the hour, else that of the first stand that names it or has its id.
	UTCOffset         time.Duration
	Feed              string
	Interval, Latency time.Duration
	Unit              string // of values that come without one
	Quantities        []quantity.Quantity
}

// LoadRegister reads a register. The error is Problems when the file could be
// read, and says what the operating system said when it could not.
func LoadRegister(file string) (*Register, error) {
	data, err := os.ReadFile(file)
	if err != nil {
		return nil, fmt.Errorf("reading the stands: %w", err)
	}
	return ParseRegister(filepath.ToSlash(file), data)
}

// ParseRegister reads a register from memory; name is the file's name in
// problems. The error, if any, is Problems: every mistake of the file.
func ParseRegister(name string, data []byte) (*Register, error) {
	r := &reading{
		sheet:    &sheet{file: name},
		Register: &Register{File: name, stands: map[string]int{}, known: map[string]Source{}},
		first:    map[string]int{},
	}
	if root, ok := r.parseJSON(data); ok {
		r.collection(&root)
	}
	if err := r.err(); err != nil {
		return nil, err
	}
	r.index()
	return r.Register, nil
}

// reading is a register while it is read.
type reading struct {
	*sheet
	*Register
	first map[string]int // id -> line of the feature that has it
	named []naming
}

func (r *reading) collection(root *node) {
	top := r.section(root, "")
	if root.kind != object {
		return
	}
	const collected = "FeatureCollection"
	const wrap = `write {"type": "FeatureCollection", "features": [...]} around the features`
	top.required("type", wrap)
	if found := top.text("type", collected); found != collected {
		top.complainAt("type", fmt.Sprintf("want a FeatureCollection, got %q", clip(found)), wrap)
		return
	}
	top.take("bbox")
	for _, f := range root.fields {
		if f.name == "crs" {
			top.take("crs")
			r.complain(f.at, "crs", "GeoJSON is always WGS 84 and has no crs since RFC 7946", "export with the RFC 7946 option (ogr2ogr: -lco RFC7946=YES), or remove it if it names CRS84")
		}
	}
	top.required("features", "write a list of features, one a stand or source")
	features := top.of("features", list, "write a list of features, one a stand or source")
	top.done()
	if features == nil {
		return
	}
	items := features.list()
	for i := range items {
		r.feature(&items[i], fmt.Sprintf("feature %d", i+1))
	}
	if len(r.Stands) == 0 && len(r.problems) == 0 {
		r.complain(features.at, "features", "no stand among them", `write at least one feature without "source": true`)
	}
	r.crossCheck()
}

// feature reads one feature, a stand or a source. path names it in problems
// unless it has an id.
func (r *reading) feature(n *node, path string) {
	properties, isSource := n.get("properties"), false
	if properties != nil {
		flag := properties.get("source")
		isSource = flag != nil && flag.yes
	}
	if name := n.get("id"); name != nil && name.kind == text {
		path = "stand " + clip(name.text)
		if isSource {
			path = "source " + clip(name.text)
		}
	}
	f := r.section(n, path)
	if n.kind != object {
		return
	}
	p := r.section(f.take("properties"), path)
	p.of("source", boolean, "write true for a source; leave it out for a stand")
	f.required("type", `write "type": "Feature"`)
	f.text("type", "", oneOf("Feature"))
	f.take("bbox")
	if p.node.get("id") == nil {
		f.required("id", `write "id": "north-slope" beside "type"`)
	} else if f.required("id", `it is among the properties: move it up, beside "type" (ogr2ogr: -lco ID_FIELD=id)`) == nil {
		p.take("id")
	}
	name := f.text("id", "", isID)
	if line, twice := r.first[name]; twice {
		f.complainAt("id", fmt.Sprintf("%q is given twice, first on line %d", name, line), "give one of them another id (stands and sources share one list of ids)")
	} else if name != "" {
		r.first[name] = n.at.line
	}
	if isSource {
		r.Positioned = append(r.Positioned, r.source(f, p, name))
	} else {
		r.stands[name] = len(r.Stands)
		r.Stands = append(r.Stands, r.stand(f, p, name))
	}
	f.done()
}

// Stand finds a stand by its id; nil when there is none.
func (r *Register) Stand(id string) *Stand {
	if i, ok := r.stands[id]; ok {
		return &r.Stands[i]
	}
	return nil
}

// Source returns what is known of a source: of a feature, of a stand's own id,
// and of an id that some stand names. Of any other id nothing is known: its
// numbers are NaN and its days are UTC's.
func (r *Register) Source(id string) Source {
	if s, ok := r.known[id]; ok {
		return s
	}
	return unplaced(id, 0)
}

// SourceIDs returns every id that may speak, sorted: the stands' own, the
// sources with a feature, and those that some stand names.
func (r *Register) SourceIDs() []string {
	ids := make([]string, 0, len(r.known))
	for id := range r.known {
		ids = append(ids, id)
	}
	slices.Sort(ids)
	return ids
}

// index makes ready what Source and Draws look up.
func (r *Register) index() {
	for _, s := range r.Positioned {
		r.known[s.ID] = s
	}
	for i := range r.Stands {
		st := &r.Stands[i]
		own := unplaced(st.ID, st.UTCOffset)
		own.Latitude, own.Longitude, own.Elevation = st.Latitude, st.Longitude, st.Elevation
		r.known[st.ID] = own
	}
	for i := range r.Stands { // in the order of the file: the first stand that names a source lends it its day
		st := &r.Stands[i]
		for _, ids := range st.Sources {
			for _, id := range ids {
				if _, known := r.known[id]; !known {
					r.known[id] = unplaced(id, st.UTCOffset)
				}
			}
		}
	}
	r.indexNearby()
}

// Known tells whether a source may speak: it has a feature, is a stand's own
// id, or is named by a stand.
func (r *Register) Known(id string) bool { _, ok := r.known[id]; return ok }
