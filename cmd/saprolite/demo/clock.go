package demo

import (
	"time"

	"saprolite/ingest/quantity"
)

// The invented calendar: fifteen years of history, then two years that arrive
// day by day. Between these two the wet season fails.
var (
	FirstPast = quantity.DateOf(2040, time.January, 1)
	FirstLive = quantity.DateOf(2055, time.January, 1)
	LastLive  = quantity.DateOf(2056, time.December, 31)

	failsFrom = quantity.DateOf(2055, time.November, 5)
	failsTo   = quantity.DateOf(2056, time.October, 1)
)

// Offset is the island's fixed offset from UTC.
const Offset = -2 * time.Hour
