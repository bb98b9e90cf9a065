package main

import (
	"math"
	"strings"

	"saprolite/alerts"
	"saprolite/cmd/saprolite/engine"
	"saprolite/config"
	"saprolite/detectors"
	"saprolite/detectors/climate"
	"saprolite/ingest/quantity"
)

// engineSetup turns what the operator wrote into what the engine takes.
func engineSetup(cfg *config.Config, reg *config.Register) engine.Options {
	opts := engine.Options{Place: cfg.Place, Until: quantity.NoDay}
	for _, id := range reg.SourceIDs() {
		src := reg.Source(id)
		opts.Sources = append(opts.Sources, engine.SourceSetup{
			ID: id, Feed: src.Feed, Offset: src.UTCOffset, Interval: src.Interval, Unit: src.Unit, Ranges: ranges(cfg, id),
		})
	}
	for i := range reg.Stands {
		opts.Stands = append(opts.Stands, standSetup(cfg, reg, &reg.Stands[i]))
	}
	return opts
}

// ranges are the gross ranges the operator set for a source.
func ranges(cfg *config.Config, source string) map[quantity.Quantity]engine.Range {
	out := map[quantity.Quantity]engine.Range{}
	for _, l := range cfg.Limits {
		info, _ := l.Quantity.Info()
		r := engine.Range{Lo: info.Lo, Hi: info.Hi}
		low, high := cfg.Limit(source, l.Quantity)
		if !math.IsNaN(low) {
			r.Lo = low
		}
		if !math.IsNaN(high) {
			r.Hi = high
		}
		out[l.Quantity] = r
	}
	return out
}

func standSetup(cfg *config.Config, reg *config.Register, s *config.Stand) engine.StandSetup {
	setup := engine.StandSetup{
		Info:   alerts.Stand{ID: s.ID, Name: s.Name, Groups: s.Groups, Hectares: s.Hectares},
		Offset: s.UTCOffset,
		Draws:  draws(reg, s),
		Options: detectors.Options{
			ID:           s.ID,
			Site:         climate.Site{Latitude: s.Latitude, Elevation: s.Elevation, Monthly: s.MonthlyReferenceET},
			Coefficient:  s.ETCoefficient,
			CanopyStore:  s.InterceptionStore,
			StorageLimit: s.StorageLimit,
			Established:  s.Established,
			ExtraWater:   s.ExtraWater,
			YearStart:    detectors.DefaultYearStart(s.Latitude),
			StoreLow:     detectors.StoreLow(cfg.Thresholds.StoreLow),
			FeedSilent:   detectors.FeedSilent(cfg.Thresholds.FeedSilent),
		},
	}
	setup.Options.RainFrom = from(reg, s, quantity.Precipitation)
	setup.Options.AirFrom = from(reg, s, evaporation(s))
	return setup
}

// evaporation is what a stand's evapotranspiration hangs on first: what it
// names, else air temperature.
func evaporation(s *config.Stand) quantity.Quantity {
	for _, q := range []quantity.Quantity{quantity.ActualEvapotranspiration, quantity.ReferenceEvapotranspiration} {
		if _, named := s.Sources[q]; named {
			return q
		}
	}
	return quantity.AirTemperatureMax
}

// draws says where a stand takes each quantity from, each quantity's sources
// in order of preference.
func draws(reg *config.Register, s *config.Stand) []engine.Draw {
	var out []engine.Draw
	for _, q := range detectors.Draws {
		for _, d := range reg.Draws(s, q) {
			out = append(out, draw(reg, s, q, d))
		}
	}
	for _, q := range indices(s) {
		for _, d := range reg.Draws(s, q) {
			out = append(out, draw(reg, s, q, d))
		}
	}
	return out
}

// indices are the vegetation indices a stand may take: those its sources
// name, else those in the house's order.
func indices(s *config.Stand) []quantity.Quantity {
	var named []quantity.Quantity
	for _, q := range detectors.VegetationIndices {
		if _, ok := s.Sources[q]; ok {
			named = append(named, q)
		}
	}
	if named != nil {
		return named
	}
	return detectors.VegetationIndices[:]
}

// draw moves what a source measures to the stand: air temperature by the
// lapse rate, wind to 2 m above the ground.
func draw(reg *config.Register, s *config.Stand, q quantity.Quantity, d config.Draw) engine.Draw {
	out := engine.Draw{Quantity: q, Source: d.Source, Scale: 1, From: place(s, d)}
	switch q {
	case quantity.AirTemperatureMin, quantity.AirTemperatureMax:
		if !math.IsNaN(d.HeightM) && d.Source != s.ID {
			out.Add = float64(climate.LapseOffset(s.Elevation-quantity.Metres(d.HeightM), s.Elevation))
		}
	case quantity.WindSpeed:
		if h := reg.Source(d.Source).Height; h > 0.1 {
			out.Scale = float64(climate.WindAt2m(1, h))
		}
	}
	return out
}

// from says in words where a stand takes q from, in order of preference.
func from(reg *config.Register, s *config.Stand, q quantity.Quantity) string {
	list := reg.Draws(s, q)
	if len(list) == 0 {
		return "no source"
	}
	var words []string
	for _, d := range list {
		words = append(words, place(s, d))
	}
	return strings.Join(words, ", else ")
}

func place(s *config.Stand, d config.Draw) string {
	if d.Source == s.ID {
		return "the stand's own source " + d.Source
	}
	return d.String()
}
