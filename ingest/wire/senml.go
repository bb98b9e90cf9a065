package wire

import (
	"encoding/base64"
	"math"
	"strconv"
	"strings"
	"time"
)

// knownLabels are the labels of RFC 8428 tables 1 and 2 (JSON).
var knownLabels = []string{"bn", "bt", "bu", "bv", "bs", "bver", "n", "u", "v", "vs", "vb", "vd", "s", "t", "ut"}

// Versions of SenML that are understood: up to 10, RFC 8428 section 4.4, and
// 26, which is 10 with the feature "secondary units", 10 + 2^4 (RFC 9100
// section 4; Bormann 2021). Secondary units are taken in any version.
const (
	rfcVersion            = 10
	secondaryUnitsVersion = 26
)

// absoluteFrom is the least number of seconds that is a time since 1970; a
// smaller one is relative to now (RFC 8428 section 4.5.3).
const absoluteFrom = 1 << 28

// Kind says what sort of value a record has.
type Kind uint8

const (
	NoValue Kind = iota // only a sum
	Number              // v
	Text                // vs
	Bool                // vb
	Data                // vd
)

// Record is a resolved SenML record (RFC 8428 section 4.6): its base fields
// are worked in and its time is absolute.
type Record struct {
	Index  int    // place in the pack, from 1
	Name   string // base name and name
	Unit   string // "" if none is given
	Time   time.Time
	Kind   Kind
	Number float64
	Text   string
	Bool   bool
	Data   []byte
	Sum    float64 // NaN if none is given
}

// Resolve reads a SenML pack in JSON and resolves its records, which keep the
// order of the pack. received stands for "now". Times are rounded to the
// microsecond, which is what a float64 still holds of them (RFC 8428 section
// 5: better than a microsecond over the next 100 years).
//
// A record that cannot be used is left out and gives a problem. What casts
// doubt on more than one record refuses the pack whole: then there are no
// records, and one problem whose Record is 0.
//
// A record of base fields alone only sets them, as in the example of section
// 5.1.7.
func Resolve(data []byte, received time.Time) ([]Record, []*Problem) {
	pack, p := scan(data)
	if p != nil {
		return nil, []*Problem{p}
	}
	if p := checkVersions(pack); p != nil {
		return nil, []*Problem{p}
	}
	records := make([]Record, 0, len(pack))
	var problems []*Problem
	var b base
	for i, members := range pack {
		if p := b.update(members, i+1); p != nil {
			return nil, []*Problem{p}
		}
		r, ok, p := b.resolve(members, received)
		if p != nil {
			p.Record = i + 1
			problems = append(problems, p)
		} else if ok {
			r.Index = i + 1
			records = append(records, r)
		}
	}
	return records, problems
}

// checkVersions holds every record's version against what is understood; all
// records of a pack share one version (RFC 8428 section 4.4).
func checkVersions(pack [][]member) *Problem {
	version := float64(rfcVersion)
	for i, members := range pack {
		for _, m := range members {
			if m.label != "bver" {
				continue
			}
			v, p := number(m)
			switch {
			case p != nil:
			case v < 1 || v != math.Trunc(v):
				p = problem(BadVersion, m.label, "%s is not a version, a whole number from 1", brief(m.raw))
			case v > rfcVersion && v != secondaryUnitsVersion:
				p = problem(BadVersion, m.label, "SenML version %g is not known here; send version %d (RFC 8428)", v, rfcVersion)
			case i > 0 && v != version:
				p = problem(BadVersion, m.label, "record %d has version %g, the pack began with %g; a pack has one version", i+1, v, version)
			}
			if p != nil {
				return at(m.at, p)
			}
			version = v
		}
	}
	return nil
}

// base holds the base fields in force.
type base struct {
	name, unit       string
	time, value, sum float64 // 0 when not in force
	hasSum           bool
}

// update takes over a record's base fields. They hold for all records that
// follow, so one that cannot be read spoils the pack.
func (b *base) update(members []member, record int) *Problem {
	for _, m := range members {
		var p *Problem
		switch m.label {
		case "bn":
			b.name, p = text(m)
		case "bu":
			b.unit, p = text(m)
		case "bt":
			b.time, p = number(m)
		case "bv":
			b.value, p = number(m)
		case "bs":
			b.sum, p = number(m)
			b.hasSum = true
		default:
			if strings.HasPrefix(m.label, "b") && mustUnderstand(m.label) {
				p = problem(BadVersion, brief(m.label), "must be understood (RFC 8428 section 4.4), and is not known here")
			}
		}
		if p != nil {
			p.Reason += "; it is a base field of record " + strconv.Itoa(record) + " and holds for what follows, so the whole pack is refused"
			return at(m.at, p)
		}
	}
	return nil
}

func mustUnderstand(label string) bool { return strings.HasSuffix(label, "_") }

// resolve works the base fields into a record; ok is false for one that only
// sets them.
func (b *base) resolve(members []member, received time.Time) (r Record, ok bool, p *Problem) {
	r = Record{Name: b.name, Unit: b.unit, Sum: math.NaN()}
	if b.hasSum {
		r.Sum = b.sum
	}
	var regular, summed bool
	seconds := b.time
	for _, m := range members {
		given := true
		switch m.label {
		case "n":
			var name string
			name, p = text(m)
			r.Name += name
		case "u":
			r.Unit, p = text(m)
		case "t":
			var t float64
			t, p = number(m)
			seconds += t
		case "s":
			var s float64
			s, p = number(m)
			r.Sum, summed = b.sum+s, true
		case "v", "vs", "vb", "vd":
			if r.Kind != NoValue {
				return r, false, problem(BadValue, m.label, "a record has one value; this one has several")
			}
			p = r.value(m, b.value)
		case "ut":
		default:
			given = false
			if mustUnderstand(m.label) {
				p = problem(BadVersion, brief(m.label), "must be understood (RFC 8428 section 4.4), and is not known here")
			}
		}
		if p != nil {
			return r, false, p
		}
		regular = regular || given
	}
	switch {
	case !regular:
		return r, false, nil
	case r.Kind == NoValue && !summed:
		return r, false, problem(BadValue, "v", "the record has no value; want \"v\": a number")
	case !validName(r.Name):
		return r, false, problem(BadName, "n", "the name %s is none SenML allows; want letters, digits and - : . / _, a letter or digit first (RFC 8428 section 4.5.1)", brief(r.Name))
	case math.IsInf(r.Number, 0) || math.IsInf(r.Sum, 0):
		return r, false, problem(BadValue, "v", "base value and value together are too large for a number")
	}
	r.Time, p = instant(seconds, received)
	return r, p == nil, p
}

// value reads v, vs, vb or vd.
func (r *Record) value(m member, base float64) (p *Problem) {
	switch m.label {
	case "v":
		r.Kind = Number
		r.Number, p = number(m)
		if base != 0 { // so that -0 stays what it is
			r.Number += base
		}
	case "vs":
		r.Kind = Text
		r.Text, p = text(m)
	case "vb":
		r.Kind, r.Bool = Bool, string(m.raw) == "true"
		if !r.Bool && string(m.raw) != "false" {
			p = problem(BadValue, m.label, "%s is not true or false", brief(m.raw))
		}
	case "vd":
		r.Kind = Data
		var s string
		if s, p = text(m); p == nil {
			var err error
			if r.Data, err = base64.RawURLEncoding.DecodeString(s); err != nil { // RFC 8428 section 5: no padding
				p = problem(BadValue, m.label, "not base64 with the URL alphabet and no padding: %v", err)
			}
		}
	}
	return p
}

func number(m member) (float64, *Problem) {
	if c := m.raw[0]; c != '-' && (c < '0' || c > '9') {
		return 0, problem(BadValue, m.label, "%s is not a number; numbers stand without quotes", brief(m.raw))
	}
	return readNumber(m.label, m.raw)
}

func text(m member) (string, *Problem) {
	if m.raw[0] != '"' {
		return "", problem(BadValue, m.label, "%s is not a text; texts stand in quotes", brief(m.raw))
	}
	s, err := unquote(m.raw)
	if err != nil {
		return "", problem(Unreadable, m.label, "unreadable text: %v", err)
	}
	return s, nil
}

// validName holds a name against RFC 8428 section 4.5.1.
func validName(s string) bool {
	for i, c := range []byte(s) {
		letter := c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9'
		if !letter && (i == 0 || strings.IndexByte("-:./_", c) < 0) {
			return false
		}
	}
	return s != ""
}

// instant makes a time of SenML seconds.
func instant(seconds float64, received time.Time) (time.Time, *Problem) {
	const farthest = 1e11 // seconds, 3,000 years: keeps the arithmetic whole
	if math.Abs(seconds) < farthest {
		whole, rest := math.Modf(seconds)
		since := time.Unix(int64(whole), 0)
		if seconds < absoluteFrom {
			since = time.Unix(received.Unix()+int64(whole), int64(received.Nanosecond()))
		}
		if t := since.Add(time.Duration(math.Round(rest*1e6)) * time.Microsecond).UTC(); inRange(t) {
			return t, nil
		}
	}
	return time.Time{}, problem(BadTime, "t", "%g s lies outside the years %d to %d; want seconds since 1970, or relative to now if below 2^28 (milliseconds?)", seconds, firstYear, lastYear)
}
