package wire

import (
	"fmt"
	"math"
	"strconv"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// wireUnit is the unit each canonical unit travels in: one of the SenML
// registries (RFC 8428 section 12.1; RFC 8798 sections 2 and 3).
var wireUnit = map[string]string{
	"mm": "mm", "degC": "Cel", "%": "%", "1": "/", "m3/m3": "/", "permil": "/1000",
	"kPa": "Pa", "MPa": "Pa", "m/s": "m/s", "W/m2": "W/m2", "um": "m", "m": "m", "cm3 cm-2 h-1": "mm/h",
}

// EncodeSenML writes observations of one source as a SenML pack in JSON that
// DecodeSenML reads back, given the source and the interval.
//
// Values survive to the bit where the canonical unit itself travels (mm,
// degC, %, 1, m3/m3, permil, m/s, W/m2, m). Potentials and vapour pressure
// travel in Pa, stem radius in m, sap flux density in mm/h: their decimal
// point moves, and what has at most 15 significant digits survives.
//
// What a pack cannot carry is refused: dates (see Observation.In), intervals
// that differ, a deviation, a flag that says unusable, times finer than a
// microsecond or before July 1978. When a value became known, and that it was
// passed by a test, is for the receiver to say. The error is a *Problem with
// code TooLarge when the pack would be larger than MaxSenML: send it in parts.
func EncodeSenML(list []observation.Observation) ([]byte, error) {
	b := []byte{'['}
	for i, o := range list {
		if err := carriable(o, list[0]); err != nil {
			return nil, fmt.Errorf("SenML record %d, %s of %q: %w", i+1, o.Quantity, o.Source, err)
		}
		unit := wireUnit[o.Quantity.Unit()]
		if base := o.Quantity.Base(); base == quantity.RelativeHumidity || base == quantity.RelativeHumidityMin || base == quantity.RelativeHumidityMax {
			unit = "%RH"
		}
		conv, err := quantity.ConverterFor(o.Quantity, unit)
		if err != nil {
			return nil, fmt.Errorf("SenML record %d: %w", i+1, err)
		}
		v, err := conv.Back(o.Value, o.End.Sub(o.Start))
		if err != nil {
			return nil, fmt.Errorf("SenML record %d: %w", i+1, err)
		}
		if i > 0 {
			b = append(b, ",\n"...)
		}
		b = append(append(append(b, `{"n":"`...), o.Quantity...), `","u":"`...)
		b = append(append(b, unit...), `","t":`...)
		b = appendSeconds(b, o.End)
		b = append(appendNumber(append(b, `,"v":`...), v), '}')
	}
	b = append(b, ']')
	if len(list) == 0 {
		return nil, fmt.Errorf("SenML: a pack has at least one record")
	}
	if len(b) > MaxSenML {
		return nil, problem(TooLarge, "", "the pack would have %d bytes; send at most %d at once", len(b), MaxSenML)
	}
	return b, nil
}

func carriable(o, first observation.Observation) error {
	switch {
	case o.Source != first.Source:
		return fmt.Errorf("a pack has one source, this one began with %q", first.Source)
	case o.WholeDays:
		return fmt.Errorf("times are dates; give instants")
	case o.End.Sub(o.Start) != first.End.Sub(first.Start):
		return fmt.Errorf("a pack has one interval, this one began with %s", first.End.Sub(first.Start))
	case !o.Flag.Usable() || !math.IsNaN(o.SD):
		return fmt.Errorf("SenML has no place for flag %d or sd %v", o.Flag, o.SD)
	case math.IsNaN(o.Value) || math.IsInf(o.Value, 0):
		return fmt.Errorf("value %v is no JSON number", o.Value)
	case o.End.Unix() < absoluteFrom || !inRange(o.End.UTC()):
		return fmt.Errorf("%s cannot be told from a relative time, or is beyond belief", o.End)
	case !o.End.Equal(o.End.Truncate(time.Microsecond)):
		return fmt.Errorf("%s is finer than a microsecond", o.End)
	}
	return nil
}

// appendSeconds writes t as decimal seconds since 1970, with no rounding.
func appendSeconds(b []byte, t time.Time) []byte {
	b = strconv.AppendInt(b, t.Unix(), 10)
	if us := t.Nanosecond() / 1000; us != 0 {
		b = fmt.Appendf(b, ".%06d", us)
	}
	return b
}
