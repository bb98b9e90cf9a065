package wire

import (
	"bufio"
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"unicode/utf8"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// The columns of design 5.3, in its order.
const (
	colSource = iota
	colQuantity
	colStart
	colEnd
	colValue
	colUnit
	colSD
	colFlag
	colAvailable
	columnCount
)

var columnNames = [columnCount]string{"source", "quantity", "start", "end", "value", "unit", "sd", "flag", "available"}

func required(col int) bool {
	return col != colEnd && col != colSD && col != colFlag && col != colAvailable
}

const maxLine = 64 << 10 // bytes; a row is a hundred or so

// CSVReader reads observations from CSV by design 5.3. A line is a row: a
// quote that is never closed spoils its own line and no other.
type CSVReader struct {
	in     *bufio.Reader
	file   string
	line   int
	fields [][]byte // of the current line
	order  []int    // column of each field
	row    [columnCount][]byte
	err    error // that ended reading

	// What repeats is resolved once.
	sources    map[string]string
	quantities map[string]quantity.Quantity
	units      map[quantity.Quantity]map[string]quantity.Converter
}

// NewCSVReader reads the header from r. file is the name used in problems.
// The error is a *Problem, naming all that is wrong with the header, or what
// reading failed with.
func NewCSVReader(r io.Reader, file string) (*CSVReader, error) {
	c := &CSVReader{
		in:         bufio.NewReaderSize(r, maxLine),
		file:       file,
		sources:    map[string]string{},
		quantities: map[string]quantity.Quantity{},
		units:      map[quantity.Quantity]map[string]quantity.Converter{},
	}
	line, p, err := c.readLine()
	if err == io.EOF {
		p = problem(Unreadable, "", "the file is empty; want a header line: %s", strings.Join(columnNames[:], ","))
	} else if err != nil {
		return nil, err
	}
	if p == nil {
		p = c.header(line)
	}
	if p != nil {
		return nil, c.at(p)
	}
	return c, nil
}

func (c *CSVReader) header(line []byte) *Problem {
	if p := c.split(line); p != nil {
		return p
	}
	if len(c.fields) == 1 && bytes.ContainsAny(line, ";\t") {
		return problem(Unreadable, "", "the header is not separated by commas; save the file as CSV with commas, and with decimal points")
	}
	code := BadColumn
	var wrong []string
	seen := [columnCount]bool{}
	for _, f := range c.fields {
		col := slices.Index(columnNames[:], string(f))
		switch {
		case col < 0:
			wrong = append(wrong, fmt.Sprintf("unknown column %s", brief(f)))
		case seen[col]:
			code = DuplicateKey
			wrong = append(wrong, fmt.Sprintf("column %q comes twice", f))
		default:
			seen[col] = true
		}
		c.order = append(c.order, col)
		if len(wrong) > 10 {
			break // of a hostile or binary file no more need be said
		}
	}
	for col, name := range columnNames {
		if required(col) && !seen[col] {
			wrong = append(wrong, fmt.Sprintf("column %q is missing", name))
		}
	}
	if len(wrong) > 0 {
		return problem(code, "", "%s; want %s (end, sd, flag and available may be left out)", strings.Join(wrong, ", "), strings.Join(columnNames[:], ","))
	}
	return nil
}

// Next returns the next observation, in canonical units. The error is io.EOF
// at the end, a *Problem for a row that cannot be used, after which reading
// may go on, or what reading failed with, which ends it.
func (c *CSVReader) Next() (observation.Observation, error) {
	for {
		line, p, err := c.readLine()
		if err != nil {
			return observation.Observation{}, err
		}
		if p == nil && len(line) == 0 {
			continue
		}
		if p == nil {
			p = c.split(line)
		}
		var o observation.Observation
		if p == nil {
			o, p = c.parse()
		}
		if p != nil {
			return observation.Observation{}, c.at(p)
		}
		return o, nil
	}
}

// Line returns the number of the line last read, from 1.
func (c *CSVReader) Line() int { return c.line }

func (c *CSVReader) at(p *Problem) *Problem {
	p.File, p.Line = c.file, c.line
	return p
}

var byteOrderMark = []byte("\ufeff")

// readLine returns the next line without its end, valid until the next call.
func (c *CSVReader) readLine() ([]byte, *Problem, error) {
	if c.err != nil {
		return nil, nil, c.err
	}
	line, err := c.in.ReadSlice('\n')
	if len(line) > 0 {
		c.line++
	}
	tooLong := err == bufio.ErrBufferFull
	for err == bufio.ErrBufferFull {
		_, err = c.in.ReadSlice('\n')
	}
	if err != nil && err != io.EOF {
		c.err = fmt.Errorf("read %s after line %d: %w", c.file, c.line, err)
		return nil, nil, c.err
	}
	if err == io.EOF && len(line) == 0 {
		c.err = io.EOF
		return nil, nil, io.EOF
	}
	if tooLong {
		return nil, problem(TooLarge, "", "the line is longer than %d bytes; a row is one line", maxLine), nil
	}
	if c.line == 1 {
		line = bytes.TrimPrefix(line, byteOrderMark)
	}
	line = bytes.TrimSuffix(line, []byte("\n"))
	line = bytes.TrimSuffix(line, []byte("\r"))
	if !utf8.Valid(line) {
		return nil, problem(Unreadable, "", "not UTF-8 text; save the file as UTF-8"), nil
	}
	if bytes.IndexByte(line, 0) >= 0 {
		return nil, problem(Unreadable, "", "contains a NUL byte; save the file as UTF-8 text"), nil
	}
	return line, nil, nil
}

// split sets c.fields and, once there is a header, c.row.
func (c *CSVReader) split(line []byte) *Problem {
	c.fields = c.fields[:0]
	if bytes.IndexByte(line, '"') >= 0 {
		r := csv.NewReader(bytes.NewReader(line))
		r.FieldsPerRecord = -1
		record, err := r.Read()
		if err != nil {
			var syntax *csv.ParseError
			if errors.As(err, &syntax) {
				err = syntax.Err
			}
			return problem(Unreadable, "", "%v; quote a field as a whole or not at all", err)
		}
		for _, f := range record {
			c.fields = append(c.fields, bytes.TrimSpace([]byte(f)))
		}
	} else {
		for rest, more := line, true; more; {
			var f []byte
			f, rest, more = bytes.Cut(rest, []byte(","))
			c.fields = append(c.fields, bytes.TrimSpace(f))
		}
	}
	if c.order == nil {
		return nil
	}
	if len(c.fields) != len(c.order) {
		return problem(Unreadable, "", "has %d fields, the header has %d; look for a decimal comma or a missing comma", len(c.fields), len(c.order))
	}
	for i, f := range c.fields {
		c.row[c.order[i]] = f
	}
	return nil
}
