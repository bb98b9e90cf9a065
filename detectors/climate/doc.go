// Package climate turns a day's weather into the evaporative demand of the
// air: reference evapotranspiration, and the sun geometry and vapour
// pressures it needs. One function is one equation, with its number.
//
// Use Reference for a stand-day: it takes what is known and says which method
// it could use. Use the single equations to check a number by hand. Do not
// use it for what a stand really evaporates (package ledger), for hours
// (every equation here is for a day or a month), or to judge whether a
// reading is plausible (ingest/quality).
//
// "Equation n" without a name is FAO-56: Allen R.G., Pereira L.S., Raes D.,
// Smith M. 1998, Crop evapotranspiration, FAO Irrigation and Drainage Paper
// 56, Rome. A missing input is NaN and gives NaN. Angles inside the package
// are radians; days of the year count from 1 (1 January) to 366.
package climate
