package quantity

import (
	"cmp"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"
)

// unit says how a value in it becomes one in the canonical unit of its group,
// in the order of the fields. The zero value changes nothing.
type unit struct {
	name     string        // as shown to the operator; its normal form is found too
	also     []string      // other names for the same
	add      float64       // added first; not to a difference
	exact    float64       // a factor that is no ratio of small whole numbers; 0 is 1
	shift    int           // places the decimal point moves to the right
	mul, div int64         // 0 is 1
	per      time.Duration // a rate per this long; the canonical value is the total over the span
	energy   bool          // joules over the span; the canonical value is the mean power
}

// groups lists, by canonical unit, every unit accepted for it. Names are those
// of UCUM and of the SenML registries (RFC 8428 section 12.1, RFC 8798
// sections 2 and 3) and those people really write.
//
// Powers of ten are SI prefixes (BIPM, SI Brochure, 9th ed., table 7), minutes
// to days its table 8. A kilogram of water on a square metre is a millimetre
// and a gram a cubic centimetre, as everywhere in the trade (density 1000
// kg/m3; FAO-56 chapter 1).
var groups = map[string][]unit{
	"mm": {
		{name: "mm"},
		{name: "cm", shift: 1},
		{name: "m", shift: 3},
		{name: "kg/m2"},
		{name: "l/m2"},
		{name: "in", also: []string{"[in_i]", "inch"}, mul: 127, div: 5}, // international inch, 25.4 mm exactly (1959)
		// Rates, taken over the span; not for snow water equivalent.
		{name: "mm/h", per: time.Hour},
		{name: "mm/d", per: dayLength},
		{name: "mm/min", per: time.Minute},
		{name: "mm/s", per: time.Second},
		{name: "kg/m2/h", per: time.Hour},
		{name: "kg/m2/d", per: dayLength},
		{name: "kg/m2/s", per: time.Second},
		{name: "m/s", shift: 3, per: time.Second}, // SenML's only registered rate; RFC 8798: 1 mm/h is 1/3600000 m/s
	},
	"degC": {
		{name: "degC", also: []string{"Cel", "°C", "℃", "C"}},
		{name: "K", add: -273.15},                                                     // definition of the degree Celsius, SI Brochure 2.3.1
		{name: "degF", also: []string{"[degF]", "°F", "℉"}, add: -32, mul: 5, div: 9}, // definition
	},
	"%": {
		{name: "%", also: []string{"%RH", "/100"}},
		{name: "1", also: []string{"/"}, shift: 2},
	},
	"1": {
		{name: "1", also: []string{"/", "m2/m2"}},
		{name: "%", also: []string{"/100"}, shift: -2},
		{name: "/1000", shift: -3},
	},
	"m3/m3": {
		{name: "m3/m3", also: []string{"cm3/cm3", "1", "/"}},
		{name: "%", also: []string{"/100", "%vol", "vol%"}, shift: -2},
	},
	"permil": {
		{name: "permil", also: []string{"‰", "/1000", "[ppth]"}},
		{name: "1", also: []string{"/"}, shift: 3},
	},
	"kPa": {
		{name: "kPa"},
		{name: "Pa", shift: -3},
		{name: "hPa", also: []string{"mbar"}, shift: -1},
		{name: "MPa", shift: 3},
		{name: "bar", shift: 2},
	},
	"MPa": {
		{name: "MPa"},
		{name: "Pa", shift: -6},
		{name: "hPa", also: []string{"mbar"}, shift: -4},
		{name: "kPa", also: []string{"cbar"}, shift: -3}, // tensiometers read centibars
		{name: "bar", shift: -1},
		{name: "psi", also: []string{"[psi]"}, exact: 4.4482216152605, mul: 25, div: 16129}, // pound-force 4.4482216152605 N on (25.4 mm)^2, both exact (NIST SP 811, appendix B)
	},
	"m/s": {
		{name: "m/s"},
		{name: "km/h", mul: 5, div: 18}, // 1000 m in 3600 s
		{name: "kn", also: []string{"[kn_i]", "kt"}, mul: 463, div: 900}, // international knot, 1852 m in 3600 s
	},
	"W/m2": {
		{name: "W/m2"},
		{name: "MJ/m2", shift: 6, energy: true},
		{name: "kJ/m2", shift: 3, energy: true},
		{name: "J/m2", energy: true},
		{name: "J/cm2", shift: 4, energy: true},
		{name: "Wh/m2", mul: 3600, energy: true}, // RFC 8798
		{name: "kWh/m2", shift: 3, mul: 3600, energy: true},
		{name: "MJ/m2/d", mul: 625, div: 54}, // 1000000 J in 86400 s
	},
	"um": {
		{name: "um"},
		{name: "mm", shift: 3},
		{name: "cm", shift: 4},
		{name: "m", shift: 6},
	},
	"m": {
		{name: "m"},
		{name: "cm", shift: -2},
		{name: "mm", shift: -3},
		{name: "ft", also: []string{"[ft_i]"}, mul: 381, div: 1250}, // international foot, 0.3048 m exactly (1959)
	},
	"cm3 cm-2 h-1": {
		{name: "cm3 cm-2 h-1", also: []string{"cm/h", "g/cm2/h"}},
		{name: "mm/h", also: []string{"kg/m2/h"}, shift: -1},
		{name: "m/s", also: []string{"m3/m2/s"}, shift: 2, mul: 3600}, // 100 cm, 3600 s in the hour
		{name: "g/m2/s", shift: -4, mul: 3600},                        // 10000 cm2 in the m2, 3600 s in the hour
	},
}

// index finds a unit by canonical unit and spelling, as written or in normal
// form. It is built once from groups and never written to again.
var index = func() map[string]map[string]unit {
	all := make(map[string]map[string]unit, len(groups))
	for canonical, list := range groups {
		byName := make(map[string]unit)
		for _, u := range list {
			for _, name := range append([]string{u.name}, u.also...) {
				byName[name] = u
				byName[normal(name)] = u
			}
		}
		all[canonical] = byName
	}
	return all
}()

// words are other spellings of factors within a unit.
var words = map[string]string{"day": "d", "hour": "h", "hr": "h", "sec": "s", "L": "l"}

var signs = strings.NewReplacer(
	"²", "2", "³", "3", "⁻", "-", "¹", "1", "−", "-", "**", "", "^", "",
	"·", ".", "⋅", ".", "*", ".", " ", ".", "µ", "u", "μ", "u", // micro sign and Greek mu
)

// normal writes a unit as a product of powers joined by dots, so that kg/m2,
// kg.m-2, kg m^-2 and kg m⁻² are one. It is UCUM's reading: a slash turns the
// factor (or bracket) after it and no more. What is no such product comes back
// as it was.
func normal(s string) string {
	if len(s) > 40 || !utf8.ValidString(s) { // no unit is longer, or anything but UTF-8
		return s
	}
	in := signs.Replace(s)
	var out strings.Builder
	sign, inside := 1, 0 // of the next factor; of the open bracket, 0 for none
	need := true         // a factor must follow
	for i := 0; i < len(in); {
		switch c := in[i]; {
		case c == '.':
			i++
		case c == '/' && sign > 0 && (!need || out.Len() == 0):
			sign, need = -1, true
			i++
		case c == '(' && inside == 0:
			inside, sign, need = sign, 1, true
			i++
		case c == ')' && inside != 0 && !need:
			inside = 0
			i++
		default:
			symbol, power, n := factor(in[i:])
			if n == 0 {
				return s
			}
			write(&out, symbol, power*sign*cmp.Or(inside, 1))
			sign, need = 1, false
			i += n
		}
	}
	if inside != 0 || need {
		return s
	}
	return out.String()
}

func write(out *strings.Builder, symbol string, power int) {
	if w, ok := words[symbol]; ok {
		symbol = w
	}
	if out.Len() > 0 {
		out.WriteByte('.')
	}
	out.WriteString(symbol)
	if power != 1 {
		out.WriteString(strconv.Itoa(power))
	}
}

// factor reads a symbol with its power, one digit, from the start of s, and
// tells how many bytes it took; none if there is no symbol.
func factor(s string) (symbol string, power, n int) {
	i := strings.IndexAny(s, "./()-+0123456789")
	if s[0] == '[' { // a UCUM symbol in brackets may hold anything
		i = strings.IndexByte(s, ']') + 1
	}
	if i < 0 {
		return s, 1, len(s)
	}
	symbol, n, power = s[:i], i, 1
	if n < len(s) && s[n] == '-' {
		power = -1
		n++
	}
	if n < len(s) && s[n] >= '1' && s[n] <= '9' {
		power *= int(s[n] - '0')
		n++
	} else if power < 0 {
		return "", 0, 0
	}
	if symbol == "" || n < len(s) && s[n] >= '0' && s[n] <= '9' {
		return "", 0, 0
	}
	return symbol, power, n
}
