package demo

import (
	_ "embed"

	"saprolite/ingest/quantity"
)

// Forest is the register of the invented forest: twelve stands, three rain
// gauges, a mast and a flux tower (GeoJSON, design 5.2).
//
//go:embed forest.geojson
var Forest []byte

// Place is the name of the invented forest.
const Place = "Corrow Forest (invented)"

// Where the invented mast stands.
const (
	latitude      quantity.Degrees = 36.19
	mastElevation quantity.Metres  = 300
)
