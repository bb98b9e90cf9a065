package daybook

import (
	"fmt"
	"math"
	"time"

	"github.com/fxamacker/cbor/v2"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

const daysInYear = 366

// whole marks, in a column's flags, a day made of one reading that speaks for
// exactly that day: the day value is the reading, nothing else need be kept.
const whole = 0x80

// column is one quantity in one year: a slot per day of the year.
type column struct {
	_ struct{} `cbor:",toarray"`

	Value []float64
	SD    []float64 // empty while every sd is unknown
	Flag  []byte    // 0: nothing came; otherwise QARTOD's flag, plus whole
	// Known is when the value became known: milliseconds after the end of its day.
	Known []int64
}

func newColumn() *column {
	c := &column{Value: make([]float64, daysInYear), Flag: make([]byte, daysInYear), Known: make([]int64, daysInYear)}
	return c
}

// page is a source's year.
type page map[quantity.Quantity]*column

func (c *column) get(i int, end time.Time) (observation.DayValue, bool) {
	if c.Flag[i] == 0 {
		return observation.DayValue{}, false
	}
	v := observation.DayValue{Value: c.Value[i], SD: math.NaN(), Flag: observation.Flag(c.Flag[i] &^ whole)}
	if len(c.SD) > 0 {
		v.SD = c.SD[i]
	}
	v.Available = end.Add(time.Duration(c.Known[i]) * time.Millisecond)
	return v, true
}

func (c *column) set(i int, v observation.DayValue, isWhole bool, end time.Time) {
	c.Value[i] = v.Value
	if len(c.SD) == 0 && !math.IsNaN(v.SD) {
		c.SD = make([]float64, daysInYear)
		for k := range c.SD {
			c.SD[k] = math.NaN()
		}
	}
	if len(c.SD) > 0 {
		c.SD[i] = v.SD
	}
	c.Flag[i] = byte(v.Flag)
	if isWhole {
		c.Flag[i] |= whole
	}
	c.Known[i] = int64(v.Available.Sub(end) / time.Millisecond)
}

// codec writes books deterministically: the same content is the same bytes.
// Floats are shortened only where that loses nothing.
var codec = func() cbor.EncMode {
	opts := cbor.CoreDetEncOptions()
	mode, err := opts.EncMode()
	if err != nil {
		panic(err) // constant options: cannot happen
	}
	return mode
}()

func encode(v any) ([]byte, error) {
	b, err := codec.Marshal(v)
	if err != nil {
		return nil, fmt.Errorf("encode book: %w", err)
	}
	return b, nil
}

func decodePage(b []byte) (page, error) {
	p := page{}
	if len(b) == 0 {
		return p, nil
	}
	if err := cbor.Unmarshal(b, &p); err != nil {
		return nil, err
	}
	for q, c := range p {
		if c == nil || len(c.Value) != daysInYear || len(c.Flag) != daysInYear || len(c.Known) != daysInYear || len(c.SD) != 0 && len(c.SD) != daysInYear {
			return nil, fmt.Errorf("column %s has not %d days", q, daysInYear)
		}
	}
	return p, nil
}
