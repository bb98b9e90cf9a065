package quantity

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// Errors a caller may have to tell apart.
var (
	ErrUnit = errors.New("unit does not fit") // missing, unknown, or of something else
	ErrSpan = errors.New("span unknown")      // a rate or an energy without the time it is over
)

// Unit returns q's canonical unit, "" for an unknown quantity.
func (q Quantity) Unit() string {
	info, _ := q.Info()
	return info.Unit
}

// Convert returns value, given in unit, in q's canonical unit. span is the
// time the value speaks for; it is needed only where a total is given as a
// rate (mm/h) or a mean power as an energy (MJ/m2).
//
// A value in the canonical unit comes back bit for bit. Where units differ by
// a power of ten the result is what moving the decimal point in the shortest
// writing of value gives: -1.2e6 Pa is -1.2 MPa, as written.
//
// The error wraps ErrUnit, and says which units are accepted, or ErrSpan.
func Convert(q Quantity, value float64, unit string, span time.Duration) (float64, error) {
	c, err := ConverterFor(q, unit)
	if err != nil {
		return 0, err
	}
	return c.Value(value, span)
}

// Converter turns values in one unit into one quantity's canonical unit. Use
// it instead of Convert where many values come in the same unit.
type Converter struct {
	unit unit
}

// ConverterFor returns the converter from unit to q's canonical unit. The
// error wraps ErrUnit and says which units are accepted.
func ConverterFor(q Quantity, unit string) (Converter, error) {
	info, ok := q.Info()
	if !ok {
		return Converter{}, fmt.Errorf("unknown quantity %q: %w", q, ErrUnit)
	}
	byName := index[info.Unit]
	u, ok := byName[unit]
	if !ok {
		u, ok = byName[normal(unit)]
	}
	if ok && (u.per == 0 || info.Fold == Total) {
		return Converter{unit: u}, nil
	}
	if unit == "" {
		return Converter{}, &unitError{fmt.Sprintf("unit missing: want %s", accepted(info))}
	}
	return Converter{}, &unitError{fmt.Sprintf("unit %s does not fit %s: want one of %s", brief(unit), q, accepted(info))}
}

type unitError struct{ text string }

func (e *unitError) Error() string        { return e.text }
func (e *unitError) Is(target error) bool { return target == ErrUnit }

// brief quotes s, the middle left out when it is long.
func brief(s string) string {
	if len(s) > 40 {
		return strconv.Quote(s[:40]) + "..."
	}
	return strconv.Quote(s)
}

// accepted lists the units that fit, the canonical one first.
func accepted(info Info) string {
	var names []string
	for _, u := range groups[info.Unit] {
		if u.per == 0 || info.Fold == Total {
			names = append(names, u.name)
		}
	}
	return strings.Join(names, ", ")
}

// Value converts a value that speaks for span.
func (c Converter) Value(v float64, span time.Duration) (float64, error) {
	u := c.unit
	if u.add != 0 {
		v += u.add
	}
	return c.scale(v, span)
}

// SD converts a standard deviation, or any difference: the zero of the scale
// (kelvin, Fahrenheit) plays no part.
func (c Converter) SD(v float64, span time.Duration) (float64, error) { return c.scale(v, span) }

func (c Converter) scale(v float64, span time.Duration) (float64, error) {
	u := c.unit
	if (u.per != 0 || u.energy) && span <= 0 {
		return 0, c.spanError()
	}
	if u.exact != 0 {
		v *= u.exact
	}
	v = ratio(shift(v, u.shift), u.mul, u.div)
	switch {
	case u.per != 0:
		v = ratio(v, int64(span), int64(u.per))
	case u.energy:
		v = ratio(v, int64(time.Second), int64(span))
	}
	return v, nil
}

// Back is the inverse of Value: from the canonical unit to c's.
func (c Converter) Back(v float64, span time.Duration) (float64, error) {
	u := c.unit
	switch {
	case (u.per != 0 || u.energy) && span <= 0:
		return 0, c.spanError()
	case u.per != 0:
		v = ratio(v, int64(u.per), int64(span))
	case u.energy:
		v = ratio(v, int64(span), int64(time.Second))
	}
	v = shift(ratio(v, u.div, u.mul), -u.shift)
	if u.exact != 0 {
		v /= u.exact
	}
	if u.add != 0 {
		v -= u.add
	}
	return v, nil
}

func (c Converter) spanError() error {
	return fmt.Errorf("%s needs the time it is taken over: give start and end, or the source's interval: %w", c.unit.name, ErrSpan)
}

// ratio returns v * num / den, zero counting as one, with no more rounding
// than there must be: 24 h of a rate per hour is a factor of 24.
func ratio(v float64, num, den int64) float64 {
	num, den = max(num, 1), max(den, 1)
	a, b := num, den
	for b != 0 {
		a, b = b, a%b
	}
	if num != a {
		v *= float64(num / a)
	}
	if den != a {
		v /= float64(den / a)
	}
	return v
}

// shift moves the decimal point of v's shortest writing by places to the
// right (to the left if negative).
func shift(v float64, places int) float64 {
	if places == 0 || v == 0 || math.IsNaN(v) || math.IsInf(v, 0) {
		return v
	}
	const whole = 1 << 53 // whole numbers below it are exact
	if math.Abs(v) < whole && v == math.Trunc(v) {
		// Both sides are exact, so one correctly rounded operation is right.
		if places < 0 {
			return v / tens[-places]
		}
		return v * tens[places]
	}
	var buf [40]byte
	b := strconv.AppendFloat(buf[:0], v, 'e', -1, 64)
	e := len(b) - 1
	for b[e] != 'e' {
		e--
	}
	exp, _ := strconv.Atoi(string(b[e+1:])) // written by AppendFloat: a number
	b = strconv.AppendInt(b[:e+1], int64(exp+places), 10)
	v, _ = strconv.ParseFloat(string(b), 64) // out of range is infinite, as in any product
	return v
}

var tens = [...]float64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6}
