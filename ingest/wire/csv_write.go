package wire

import (
	"bufio"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"time"

	"saprolite/ingest/observation"
)

// CSVWriter writes observations as CSV by design 5.3, in canonical units,
// such that a CSVReader gives back the same observations to the bit.
type CSVWriter struct {
	out *bufio.Writer
	row []byte
	err error
}

// NewCSVWriter writes the header to w; Flush tells whether that worked.
func NewCSVWriter(w io.Writer) *CSVWriter {
	c := &CSVWriter{out: bufio.NewWriter(w)}
	_, c.err = c.out.WriteString(strings.Join(columnNames[:], ",") + "\n")
	return c
}

// Write writes one row. An observation that could not be read back as it is
// is refused and nothing is written; a failure to write stays.
func (c *CSVWriter) Write(o observation.Observation) error {
	if c.err != nil {
		return c.err
	}
	if err := writable(o); err != nil {
		return fmt.Errorf("write %s of %q: %w", o.Quantity, o.Source, err)
	}
	b := append(c.row[:0], o.Source...)
	b = append(append(b, ','), o.Quantity...)
	b = appendTime(append(b, ','), o.Start, o.WholeDays)
	b = append(b, ',')
	if span := o.End.Sub(o.Start); o.WholeDays && span != oneDay || !o.WholeDays && span != 0 {
		b = appendTime(b, o.End, o.WholeDays)
	}
	b = appendNumber(append(b, ','), o.Value)
	b = append(append(b, ','), o.Quantity.Unit()...)
	b = appendNumber(append(b, ','), o.SD)
	b = strconv.AppendUint(append(b, ','), uint64(o.Flag), 10)
	b = append(b, ',')
	if !o.Available.IsZero() {
		b = appendTime(b, o.Available, false)
	}
	c.row = append(b, '\n')
	_, c.err = c.out.Write(c.row)
	return c.err
}

// Flush writes what is still held back and returns the first failure.
func (c *CSVWriter) Flush() error {
	if c.err == nil {
		c.err = c.out.Flush()
	}
	return c.err
}

func writable(o observation.Observation) error {
	if err := observation.ValidID(o.Source); err != nil {
		return err
	}
	if _, ok := o.Quantity.Info(); !ok {
		return fmt.Errorf("unknown quantity")
	}
	switch missing := math.IsNaN(o.Value); {
	case !o.Flag.Valid():
		return fmt.Errorf("flag %d is none of QARTOD's", o.Flag)
	case missing != (o.Flag == observation.Missing):
		return fmt.Errorf("value %v does not go with flag %d", o.Value, o.Flag)
	case math.IsInf(o.Value, 0), math.IsInf(o.SD, 0), o.SD < 0, missing && !math.IsNaN(o.SD):
		return fmt.Errorf("value %v, sd %v cannot be written", o.Value, o.SD)
	case !inRange(o.Start.UTC()), !inRange(o.End.UTC()), !o.Available.IsZero() && !inRange(o.Available.UTC()):
		return fmt.Errorf("a time lies outside the years %d to %d", firstYear, lastYear)
	case o.End.Before(o.Start), o.WholeDays && (o.End.Equal(o.Start) || !midnight(o.Start) || !midnight(o.End)):
		return fmt.Errorf("%s to %s is no interval", o.Start, o.End)
	}
	return nil
}

func midnight(t time.Time) bool { return t.Equal(t.Truncate(oneDay)) } // Truncate counts UTC days

func appendTime(b []byte, t time.Time, date bool) []byte {
	if date {
		return t.UTC().AppendFormat(b, time.DateOnly)
	}
	return t.UTC().AppendFormat(b, time.RFC3339Nano)
}

// appendNumber writes v with as few digits as read back to v, nothing for NaN.
func appendNumber(b []byte, v float64) []byte {
	if math.IsNaN(v) {
		return b
	}
	if a := math.Abs(v); a != 0 && (a < 1e-6 || a >= 1e15) { // where plain digits get long
		return strconv.AppendFloat(b, v, 'e', -1, 64)
	}
	return strconv.AppendFloat(b, v, 'f', -1, 64)
}
