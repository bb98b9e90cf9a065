package quantity

// table is the list of design 5.5; it is never written to.
//
// Lo..Hi is the gross range of one reading: wide enough that nothing a working
// instrument can see in a forest falls outside. For a quantity that is a total
// it holds for a reading of at most a day; a longer one may be as many times
// larger as it has days. Whether a value is plausible in its series is the
// business of ingest/quality.
//
// "methods I" is the table of section I of the method specification, which
// follows Zahumenský (2004), Guidelines on Quality Control Procedures for Data
// from Automatic Weather Stations, WMO.
var table = map[Quantity]Info{
	// Water in, mm.
	Precipitation: {Unit: "mm", Fold: Total, Lo: 0, Hi: 500}, // methods I: 0..500 a day
	Throughfall:   {Unit: "mm", Fold: Total, Lo: 0, Hi: 500}, // as precipitation, of which it is a part
	Irrigation:    {Unit: "mm", Fold: Total, Lo: 0, Hi: 500}, // as precipitation; common practice of the trade, no source

	// Snow. Its water equivalent is a store, not a flow: adding up the
	// readings of a day would count the same snow many times.
	SnowWaterEquivalent: {Unit: "mm", Fold: Mean, Lo: 0, Hi: 6000}, // common practice of the trade, no source
	SnowCover:           {Unit: "1", Fold: Mean, Lo: 0, Hi: 1},     // a fraction, by definition

	// Air.
	AirTemperature:        {Unit: "degC", Fold: Mean, Lo: -80, Hi: 60},    // methods I
	AirTemperatureMin:     {Unit: "degC", Fold: Minimum, Lo: -80, Hi: 60}, // methods I
	AirTemperatureMax:     {Unit: "degC", Fold: Maximum, Lo: -80, Hi: 60}, // methods I
	RelativeHumidity:      {Unit: "%", Fold: Mean, Lo: 0, Hi: 103},        // methods I: up to 103 is saturated air
	RelativeHumidityMin:   {Unit: "%", Fold: Minimum, Lo: 0, Hi: 103},     // methods I
	RelativeHumidityMax:   {Unit: "%", Fold: Maximum, Lo: 0, Hi: 103},     // methods I
	VapourPressureDeficit: {Unit: "kPa", Fold: Mean, Lo: -0.6, Hi: 20},    // saturation at 60 degC is 19.9 kPa (FAO-56 eq. 11); below 0 the 3 % that methods I grants humidity
	WindSpeed:             {Unit: "m/s", Fold: Mean, Lo: 0, Hi: 75},       // methods I
	SolarRadiation:        {Unit: "W/m2", Fold: Mean, Lo: -10, Hi: 1600},  // methods I
	NetRadiation:          {Unit: "W/m2", Fold: Mean, Lo: -300, Hi: 1600}, // above as solar radiation; below common practice of the trade, no source

	// Water out, mm.
	ReferenceEvapotranspiration: {Unit: "mm", Fold: Total, Lo: -1, Hi: 20}, // a day; common practice of the trade, no source
	ActualEvapotranspiration:    {Unit: "mm", Fold: Total, Lo: -1, Hi: 15}, // methods I, flux ET: -1..15 a day (dew is negative)
	Transpiration:               {Unit: "mm", Fold: Total, Lo: -1, Hi: 15}, // as actual evapotranspiration, of which it is a part

	// Greenness and reflectance.
	NDVI:  {Unit: "1", Fold: Mean, Lo: -1, Hi: 1},      // a normalised difference, by definition
	EVI:   {Unit: "1", Fold: Mean, Lo: -0.2, Hi: 1},    // methods I
	EVI2:  {Unit: "1", Fold: Mean, Lo: -0.2, Hi: 1},    // as EVI, which it stands in for (Jiang et al. 2008)
	NDMI:  {Unit: "1", Fold: Mean, Lo: -1, Hi: 1},      // a normalised difference, by definition
	FAPAR: {Unit: "1", Fold: Mean, Lo: 0, Hi: 1},       // a fraction, by definition
	LAI:   {Unit: "1", Fold: Mean, Lo: 0, Hi: 20},      // measured values reach about 18 (Asner, Scurlock & Hicke 2003, from memory)
	Red:   {Unit: "1", Fold: Mean, Lo: -0.01, Hi: 1.6}, // valid range of MODIS surface reflectance (MOD09 user guide, from memory)
	NIR:   {Unit: "1", Fold: Mean, Lo: -0.01, Hi: 1.6}, // as red
	Blue:  {Unit: "1", Fold: Mean, Lo: -0.01, Hi: 1.6}, // as red
	SWIR:  {Unit: "1", Fold: Mean, Lo: -0.01, Hi: 1.6}, // as red

	// Soil and ground.
	SoilWaterContent:   {Unit: "m3/m3", Fold: Mean, Lo: 0, Hi: 0.7, HasDepth: true},  // methods I
	SoilWaterPotential: {Unit: "MPa", Fold: Mean, Lo: -10, Hi: 0.05, HasDepth: true}, // as the stem's; methods I
	WaterTableDepth:    {Unit: "m", Fold: Mean, Lo: -10, Hi: 500},                    // below ground; negative is flooded; common practice of the trade, no source
	Discharge:          {Unit: "mm", Fold: Total, Lo: 0, Hi: 500},                    // depth over the catchment, so a total (design 5.3); as precipitation
	LiveFuelMoisture:   {Unit: "%", Fold: Mean, Lo: 0, Hi: 500},                      // of dry mass; common practice of the trade, no source
	Delta18OXylem:      {Unit: "permil", Fold: Mean, Lo: lowest18O, Hi: highest18O},  // see the constants
	Delta18OShallow:    {Unit: "permil", Fold: Mean, Lo: lowest18O, Hi: highest18O},  // see the constants
	Delta18ODeep:       {Unit: "permil", Fold: Mean, Lo: lowest18O, Hi: highest18O},  // see the constants
	Delta2HXylem:       {Unit: "permil", Fold: Mean, Lo: lowest2H, Hi: highest2H},    // see the constants
	Delta2HShallow:     {Unit: "permil", Fold: Mean, Lo: lowest2H, Hi: highest2H},    // see the constants
	Delta2HDeep:        {Unit: "permil", Fold: Mean, Lo: lowest2H, Hi: highest2H},    // see the constants

	// Trees.
	StemWaterPotential:    {Unit: "MPa", Fold: Mean, Lo: -10, Hi: 0.05},          // methods I: -10..+0.05
	PredawnWaterPotential: {Unit: "MPa", Fold: Mean, Lo: -10, Hi: 0.05},          // methods I
	MiddayWaterPotential:  {Unit: "MPa", Fold: Mean, Lo: -10, Hi: 0.05},          // methods I
	SapFluxDensity:        {Unit: "cm3 cm-2 h-1", Fold: Mean, Lo: -20, Hi: 200},  // common practice of the trade, no source
	StemRadius:            {Unit: "um", Fold: Mean, Lo: -100_000, Hi: 6_000_000}, // a dendrometer's zero is arbitrary, no stem is thicker than 6 m in radius; common practice of the trade, no source
}

// Isotope ratios of natural water, permil against VSMOW. The lower ends lie a
// little below SLAP, Antarctic snow, which defines the scale: -55.5 and -428
// (IAEA reference sheet); the upper ends are for water enriched by
// evaporation: common practice of the trade, no source.
const (
	lowest18O, highest18O = -65.0, 40.0
	lowest2H, highest2H   = -480.0, 150.0
)
