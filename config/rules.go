package config

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// between wants a number from lo to hi, ends included; unit is for the message
// ("m", "mm"), hint what may have happened.
func between(lo, hi float64, unit, hint string) rule[float64] {
	if unit != "" {
		unit = " " + unit
	}
	return func(v float64) (string, string) {
		if v < lo || v > hi {
			return fmt.Sprintf("%v is out of range, want %v to %v%s", v, lo, hi, unit), hint
		}
		return "", ""
	}
}

// above wants a number greater than lo.
func above(lo float64, hint string) rule[float64] {
	return func(v float64) (string, string) {
		if v <= lo {
			return fmt.Sprintf("%v is too small, want more than %v", v, lo), hint
		}
		return "", ""
	}
}

// share wants a fraction, and knows a percentage when it sees one.
func share(v float64) (string, string) {
	switch {
	case v > 1 && v <= 100:
		return fmt.Sprintf("%v is out of range, want a fraction from 0 to 1", v), fmt.Sprintf("for %v %% write %v", v, v/100)
	case v < 0 || v > 1:
		return fmt.Sprintf("%v is out of range, want a fraction from 0 to 1", v), "correct it"
	}
	return "", ""
}

// lowestPotential guards against kPa and bar. The lowest potential at which
// half of a tree's conductance was lost, as far as measured, is -18.8 MPa
// (Callitris tuberculata; Larter et al. 2015, Plant Physiology 168:804, from
// memory); 30 leaves room for P88.
const lowestPotential = -30

// potential wants a water potential that can be a threshold of a living tree.
func potential(v float64) (string, string) {
	switch {
	case v > 0:
		return fmt.Sprintf("%v is positive; a water potential must be negative, in MPa", v), fmt.Sprintf("write %v", -v)
	case v == 0:
		return "0 is no threshold; a water potential must be negative, in MPa", "leave it out if it is not known"
	case v < lowestPotential:
		return fmt.Sprintf("%v MPa is below anything measured in trees, want %v to 0", v, lowestPotential), "10 bar or 1000 kPa are 1 MPa: convert it"
	}
	return "", ""
}

// oneOf wants one of a few words.
func oneOf(words ...string) rule[string] {
	return func(s string) (string, string) {
		if slices.Contains(words, s) {
			return "", ""
		}
		return fmt.Sprintf("unknown word %q", clip(s)), suggest(s, words)
	}
}

// oneOfNow is oneOf that knows the words that come in a later version.
func oneOfNow(now, later []string) rule[string] {
	return func(s string) (string, string) {
		if slices.Contains(later, s) {
			return fmt.Sprintf("%q is not in this version yet", s), "this version has: " + strings.Join(now, ", ")
		}
		return oneOf(now...)(s)
	}
}

// oneLine wants visible text that can stand in the subject of a mail.
func oneLine(s string) (string, string) {
	const most = 200 // common practice, no source: it must fit a subject line and a table cell
	switch {
	case strings.TrimSpace(s) == "":
		return "empty", "write it, or remove the property"
	case strings.ContainsFunc(s, unicode.IsControl):
		return fmt.Sprintf("%q has a control character or a line break in it", clip(s)), "keep it on one line"
	case strings.ContainsRune(s, unicode.ReplacementChar):
		return fmt.Sprintf("%q has a broken character in it", clip(s)), "write it again, the file saved as UTF-8"
	case len(s) > most:
		return fmt.Sprintf("longer than %d bytes", most), "shorten it"
	}
	return "", ""
}

// isID wants an id of design 5.1.
func isID(s string) (string, string) {
	err := observation.ValidID(s)
	if err == nil {
		return "", ""
	}
	if tidy := tidyID(s); tidy != "" {
		return err.Error(), fmt.Sprintf("write for example %q", tidy)
	}
	return err.Error(), `write for example "north-slope"`
}

// loadFeed is the feed of `saprolite load`: the operator's own hand, which may
// speak for every source.
const loadFeed = "load"

// isFeed wants an id that a way in may have.
func isFeed(s string) (string, string) {
	if s == loadFeed {
		return `"load" is the feed of saprolite load, which may speak for every source`, `give the feed another name, such as "loggers"`
	}
	return isID(s)
}

// tidyID proposes an id close to what was written.
func tidyID(s string) string {
	s = strings.Map(func(r rune) rune {
		switch {
		case r >= 'a' && r <= 'z' || r >= '0' && r <= '9' || r == '-' || r == '_':
			return r
		case r == ' ' || r == '.' || r == '/':
			return '-'
		}
		return -1
	}, strings.ToLower(s))
	s = strings.TrimLeft(s, "-_")
	return s[:min(len(s), 64)]
}

// knownQuantity wants a quantity of design 5.5, with or without a depth.
func knownQuantity(s string) (string, string) {
	_, err := quantity.Parse(s)
	if err == nil {
		return "", ""
	}
	base, _, _ := strings.Cut(s, ":")
	if _, ok := quantity.Quantity(base).Info(); ok {
		return err.Error(), "correct the depth, or leave it out"
	}
	if strings.Contains(err.Error(), "did you mean") {
		return err.Error(), "write the name so"
	}
	var names []string
	for _, q := range quantity.Names() {
		names = append(names, string(q))
	}
	return err.Error(), "known: " + strings.Join(names, ", ")
}

// parseQuantities turns texts that obeyed knownQuantity into quantities.
func parseQuantities(texts []string) []quantity.Quantity {
	var out []quantity.Quantity
	for _, s := range texts {
		if q, err := quantity.Parse(s); err == nil {
			out = append(out, q)
		}
	}
	return out
}

const durationHelp = `write a number and a unit: "10min", "1h", "1d" (ms, s, m or min, h, d; "1h30m" too)`

// parseDuration reads a positive duration: a Go duration, or a number with d
// (24 h) or min.
func parseDuration(s string) (time.Duration, error) {
	unit := time.Duration(0)
	digits, isDays := strings.CutSuffix(s, "d")
	if isDays {
		unit = 24 * time.Hour
	} else if minutes, ok := strings.CutSuffix(s, "min"); ok {
		digits, unit = minutes, time.Minute
	}
	if unit == 0 {
		return time.ParseDuration(s)
	}
	v, err := strconv.ParseFloat(strings.TrimSpace(digits), 64)
	if err != nil || math.IsNaN(v) || math.Abs(v) > 1e5 {
		return 0, fmt.Errorf("%q is not a duration", s)
	}
	return time.Duration(math.Round(v * float64(unit))), nil
}

// duration reads a property that is a duration within lo..hi; absent when it
// is not given or wrong.
func (s *section) duration(name string, absent, lo, hi time.Duration) time.Duration {
	good := func(v string) (string, string) {
		d, err := parseDuration(v)
		if err != nil {
			return fmt.Sprintf("%q is not a duration", clip(v)), durationHelp
		}
		if d < lo || d > hi {
			return fmt.Sprintf("%q is out of range, want %s to %s", v, showDuration(lo), showDuration(hi)), durationHelp
		}
		return "", ""
	}
	if n := s.node.get(name); n != nil && n.kind == number {
		s.known = append(s.known, name)
		s.complain(n.at, s.field(name), fmt.Sprintf("want a duration, got the number %v", n.number), durationHelp)
		return absent
	}
	v := s.text(name, "", good)
	if v == "" {
		return absent
	}
	d, _ := parseDuration(v) // good above
	return d
}

func showDuration(d time.Duration) string {
	if day := 24 * time.Hour; d >= day && d%day == 0 {
		return fmt.Sprintf("%dd", d/day)
	}
	return d.String()
}

const knownHere = "known here: "

// suggest names the nearest known word, or all of them when none is near.
func suggest(word string, known []string) string {
	best, nearest := math.MaxInt, ""
	for _, k := range known {
		if d := editDistance(strings.ToLower(word), k); d < best {
			best, nearest = d, k
		}
	}
	// A third of the letters wrong is still the same word (common practice, no
	// source).
	if nearest != "" && best <= max(1, len(nearest)/3) {
		return fmt.Sprintf("did you mean %q?", nearest)
	}
	if len(known) == 0 {
		return "remove it"
	}
	known = slices.Clone(known)
	slices.Sort(known)
	return knownHere + strings.Join(slices.Compact(known), ", ")
}

// editDistance counts insertions, deletions and replacements of bytes between
// two words (Levenshtein 1966; Wagner and Fischer 1974, J. ACM 21:168, from
// memory). Words longer than 64 bytes are nowhere near.
func editDistance(a, b string) int {
	if len(a) > 64 || len(b) > 64 {
		return math.MaxInt
	}
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := range len(a) {
		diagonal := row[0]
		row[0] = i + 1
		for j := range len(b) {
			cost := diagonal
			if a[i] != b[j] {
				cost++
			}
			diagonal = row[j+1]
			row[j+1] = min(cost, row[j]+1, row[j+1]+1)
		}
	}
	return row[len(b)]
}
