package wire

import (
	"errors"
	"math"
	"strconv"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

const oneDay = 24 * time.Hour

// parse makes an observation of c.row.
func (c *CSVReader) parse() (o observation.Observation, p *Problem) {
	if o.Source, p = c.source(c.row[colSource]); p != nil {
		return o, p
	}
	if o.Quantity, p = c.quantity(c.row[colQuantity]); p != nil {
		return o, p
	}
	if p = readInterval(&o, c.row[colStart], c.row[colEnd]); p != nil {
		return o, p
	}
	if o.Flag, p = readFlag(c.row[colFlag]); p != nil {
		return o, p
	}
	if o.Available, p = readAvailable(o, c.row[colAvailable]); p != nil {
		return o, p
	}
	return o, c.values(&o)
}

func (c *CSVReader) source(b []byte) (string, *Problem) {
	if s, ok := c.sources[string(b)]; ok {
		return s, nil
	}
	s := string(b)
	if err := observation.ValidID(s); err != nil {
		return "", problem(BadSource, columnNames[colSource], "%s", err)
	}
	c.sources[s] = s
	return s, nil
}

func (c *CSVReader) quantity(b []byte) (quantity.Quantity, *Problem) {
	if q, ok := c.quantities[string(b)]; ok {
		return q, nil
	}
	q, p := readQuantity(columnNames[colQuantity], string(b))
	if p == nil {
		c.quantities[string(b)] = q
	}
	return q, p
}

func readQuantity(field, s string) (quantity.Quantity, *Problem) {
	const longest = 64 // no name is longer
	if len(s) > longest {
		return "", problem(UnknownQuantity, field, "unknown quantity %s", brief(s))
	}
	q, err := quantity.Parse(s)
	if err != nil {
		return "", problem(UnknownQuantity, field, "%s", err)
	}
	return q, nil
}

// readInterval sets Start, End and WholeDays (design 5.3: end is exclusive;
// empty means an instant, or for a date one day).
func readInterval(o *observation.Observation, start, end []byte) (p *Problem) {
	const field = "end"
	if o.Start, o.WholeDays, p = readTime("start", start); p != nil {
		return p
	}
	if len(end) == 0 {
		o.End = o.Start
		if o.WholeDays {
			o.End = o.Start.Add(oneDay)
		}
		return nil
	}
	var isDate bool
	if o.End, isDate, p = readTime(field, end); p != nil {
		return p
	}
	switch {
	case isDate != o.WholeDays:
		return problem(BadTime, field, "start and end must both be dates or both be instants; got %s and %s", brief(start), brief(end))
	case o.End.Before(o.Start):
		return problem(BadTime, field, "ends (%s) before it starts (%s)", end, start)
	case isDate && o.End.Equal(o.Start):
		return problem(BadTime, field, "end is exclusive, so %s to %s is no time at all; for one day leave end empty or write the next day", start, end)
	}
	return nil
}

func readFlag(b []byte) (observation.Flag, *Problem) {
	if len(b) == 0 {
		return observation.NotEvaluated, nil
	}
	if f := observation.Flag(b[0] - '0'); len(b) == 1 && f.Valid() {
		return f, nil
	}
	return 0, problem(BadFlag, columnNames[colFlag], "%s is not a QARTOD flag; want 1 pass, 2 not evaluated, 3 suspect, 4 fail, 9 missing, or nothing", brief(b))
}

// readAvailable reads when the value became known. Of a date the whole day
// must be over before the value counts as known: a hindcast must not peek.
func readAvailable(o observation.Observation, b []byte) (time.Time, *Problem) {
	if len(b) == 0 {
		return time.Time{}, nil
	}
	const field = "available"
	t, isDate, p := readTime(field, b)
	if p != nil {
		return t, p
	}
	if isDate {
		t = t.Add(oneDay)
	}
	earliest := o.Start
	if o.WholeDays {
		earliest = earliest.Add(-14 * time.Hour) // no day begins earlier than at UTC+14 (IANA tz database, Pacific/Kiritimati)
	}
	if t.Before(earliest) {
		return t, problem(BadTime, field, "%s lies before start: nothing is known before it begins; leave it empty if known at its end", b)
	}
	return t, nil
}

// values sets Value and SD, in the canonical unit.
func (c *CSVReader) values(o *observation.Observation) *Problem {
	value, sd := c.row[colValue], c.row[colSD]
	o.Value, o.SD = math.NaN(), math.NaN()
	if len(value) == 0 {
		switch {
		case o.Flag != observation.Missing:
			return problem(BadValue, columnNames[colValue], "empty; write a number, or flag 9 for known missing")
		case len(sd) > 0:
			return problem(BadValue, columnNames[colSD], "there is no value for it to belong to; leave it empty")
		}
		return nil
	}
	if o.Flag == observation.Missing {
		return problem(BadFlag, columnNames[colFlag], "flag 9 says missing, yet there is a value %s; leave the value empty or change the flag", brief(value))
	}
	conv, p := c.converter(o.Quantity, c.row[colUnit])
	if p != nil {
		return p
	}
	span := o.End.Sub(o.Start)
	v, p := readNumber(columnNames[colValue], value)
	if p == nil {
		o.Value, p = converted(columnNames[colValue], columnNames[colUnit], v, span, conv.Value)
	}
	if p != nil || len(sd) == 0 {
		return p
	}
	if v, p = readNumber(columnNames[colSD], sd); p != nil {
		return p
	}
	if v < 0 {
		return problem(BadValue, columnNames[colSD], "%s is negative; a standard deviation is not", sd)
	}
	o.SD, p = converted(columnNames[colSD], columnNames[colUnit], v, span, conv.SD)
	return p
}

func (c *CSVReader) converter(q quantity.Quantity, unit []byte) (quantity.Converter, *Problem) {
	if conv, ok := c.units[q][string(unit)]; ok {
		return conv, nil
	}
	conv, err := quantity.ConverterFor(q, string(unit))
	if err != nil {
		return conv, problem(UnknownUnit, columnNames[colUnit], "%s", err)
	}
	if c.units[q] == nil {
		c.units[q] = map[string]quantity.Converter{}
	}
	c.units[q][string(unit)] = conv
	return conv, nil
}

// converted applies a conversion and tells what went wrong with it.
func converted(field, unitField string, v float64, span time.Duration, convert func(float64, time.Duration) (float64, error)) (float64, *Problem) {
	out, err := convert(v, span)
	switch {
	case errors.Is(err, quantity.ErrSpan):
		return out, problem(NoInterval, unitField, "%s", err)
	case err != nil:
		return out, problem(UnknownUnit, unitField, "%s", err)
	case math.IsInf(out, 0) || math.IsNaN(out):
		return out, problem(BadValue, field, "%g is too large to convert", v)
	}
	return out, nil
}

// readNumber reads a decimal number: no NaN, no infinity, no hexadecimal.
func readNumber(field string, b []byte) (float64, *Problem) {
	for _, ch := range b {
		if (ch < '0' || ch > '9') && ch != '.' && ch != '-' && ch != '+' && ch != 'e' && ch != 'E' {
			return 0, problem(BadValue, field, "%s is not a number; write it like 12.5, or leave it empty with flag 9 if it is known to be missing", brief(b))
		}
	}
	v, err := strconv.ParseFloat(string(b), 64)
	if errors.Is(err, strconv.ErrRange) {
		return 0, problem(BadValue, field, "%s is too large for a number", brief(b))
	}
	if err != nil {
		return 0, problem(BadValue, field, "%s is not a number; write it like 12.5, or leave it empty with flag 9 if it is known to be missing", brief(b))
	}
	return v, nil
}
