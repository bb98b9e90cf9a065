package wire

import (
	"math"
	"time"

	"saprolite/ingest/observation"
	"saprolite/ingest/quantity"
)

// SenMLOptions say what a pack itself does not.
type SenMLOptions struct {
	Source   string        // whose pack it is; not checked here
	Received time.Time     // what relative times are relative to
	Interval time.Duration // what a value speaks for, ending at its time; 0 is an instant
	Unit     string        // of records that give none; "": they must
}

// DecodeSenML reads a SenML pack in JSON by design 5.4: each record's name is
// a quantity, its time the end of the interval it speaks for. Values come out
// in canonical units, their flag NotEvaluated, their deviation unknown;
// Available is left to whoever stored the pack.
//
// Every record gives an observation or a problem, save those that only set
// base fields. What casts doubt on the pack as a whole refuses it whole, with
// one problem whose Record is 0.
func DecodeSenML(data []byte, opts SenMLOptions) ([]observation.Observation, []*Problem) {
	records, problems := Resolve(data, opts.Received)
	list := make([]observation.Observation, 0, len(records))
	units := map[unitOf]quantity.Converter{} // what repeats is resolved once
	for _, r := range records {
		o, p := r.observation(opts, units)
		if p != nil {
			p.Record = r.Index
			problems = append(problems, p)
			continue
		}
		list = append(list, o)
	}
	return list, problems
}

type unitOf struct {
	quantity quantity.Quantity
	unit     string
}

func (r Record) observation(opts SenMLOptions, units map[unitOf]quantity.Converter) (observation.Observation, *Problem) {
	o := observation.Observation{
		Source: opts.Source,
		Start:  r.Time.Add(-opts.Interval),
		End:    r.Time,
		SD:     math.NaN(),
		Flag:   observation.NotEvaluated,
	}
	var p *Problem
	if o.Quantity, p = readQuantity("n", r.Name); p != nil {
		return o, p
	}
	switch r.Kind {
	case Number:
	case NoValue:
		return o, problem(BadValue, "s", "%s has only a sum; send its value as \"v\"", o.Quantity)
	default:
		return o, problem(NotNumber, "v", "%s is given as a text, boolean or data; send a number as \"v\"", o.Quantity)
	}
	unit := r.Unit
	if unit == "" {
		unit = opts.Unit
	}
	key := unitOf{o.Quantity, unit}
	conv, ok := units[key]
	if !ok {
		var err error
		if conv, err = quantity.ConverterFor(o.Quantity, unit); err != nil {
			return o, problem(UnknownUnit, "u", "%s", err)
		}
		units[key] = conv
	}
	o.Value, p = converted("v", "u", r.Number, opts.Interval, conv.Value)
	return o, p
}
