package engine

import (
	"bufio"
	"io"
	"math"
	"strconv"
	"strings"

	"saprolite/detectors"
	"saprolite/ingest/quantity"
)

// DailyHeader is the first line of the daily file (design 5.8). New columns
// go at the end. A day's water closes as
//
//	input + interception = actual ET + overflow - change of deficit
//
// where interception is what the canopy evaporated, which actual ET contains.
const DailyHeader = "stand,day,precipitation_mm,input_mm,reference_et_mm,actual_et_mm,et_basis,overflow_mm,deficit_mm,deficit_low_mm,deficit_high_mm," +
	"limit_mm,limit_low_mm,limit_high_mm,limit_basis,fraction_used,predawn_mpa,midday_mpa,stress_integral_mpa_d,greenness," +
	"greenness_expected,greenness_z,coupling_class,coupling_slope," +
	"interception_mm"

// WriteDaily writes the daily file: one row a stand and day from day from on
// (NoDay: the account's first), as known now. Every stand is settled anew
// from its pages, so the file is the same however the data came in.
func (e *Engine) WriteDaily(w io.Writer, from quantity.Day) error {
	out := bufio.NewWriterSize(w, 1<<16)
	out.WriteString(DailyHeader + "\n")
	row := make([]byte, 0, 512)
	for _, s := range e.stands {
		if s.account == nil {
			continue
		}
		again := detectors.New(s.setup.Options, s.account.First())
		for d := again.First(); d <= s.account.State.Day; d++ {
			in, err := s.inputs(d)
			if err != nil {
				return err
			}
			again.Step(&in)
			if d >= from {
				row = appendDaily(row[:0], s.setup.Info.ID, again)
				out.Write(row)
			}
		}
	}
	return out.Flush()
}

// appendDaily appends one row. Numbers are rounded to 1e-6 of their unit;
// what is not known is empty.
func appendDaily(row []byte, id string, s *detectors.Stand) []byte {
	a, limit := &s.Today, s.Limit()
	row = append(row, id...)
	row = append(row, ',')
	row = append(row, a.Day.String()...)
	number := func(v float64) {
		row = append(row, ',')
		if !math.IsNaN(v) {
			row = strconv.AppendFloat(row, math.Round(v*1e6)/1e6, 'f', -1, 64)
		}
	}
	text := func(t string) {
		row = append(row, ',')
		if strings.ContainsAny(t, ",\"\n") {
			t = `"` + strings.ReplaceAll(t, `"`, `""`) + `"`
		}
		row = append(row, t...)
	}
	empty := func(columns int) {
		for range columns {
			row = append(row, ',')
		}
	}
	number(float64(a.Precipitation))
	number(float64(a.Flux.Input))
	number(float64(a.ReferenceET))
	number(float64(a.Flux.ActualET))
	text(a.Basis.String())
	number(float64(a.Flux.Overflow))
	number(float64(a.Deficit))
	empty(2) // deficit_low_mm, deficit_high_mm: the account's interval is not carried yet
	number(float64(limit.Value))
	number(float64(limit.Low))
	number(float64(limit.High))
	text(limit.Basis)
	number(1 - s.Left())
	empty(3) // water potential
	number(float64(a.Greenness))
	empty(4) // greenness_expected to coupling_slope
	number(float64(a.Flux.Interception))
	return append(row, '\n')
}
