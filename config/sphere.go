package config

import "math"

// Radii of a sphere of about the Earth's size, from the Geodetic Reference
// System 1980 (Moritz 2000, J. Geodesy 74:128, from memory): R1, the mean of
// the semi-axes, for distances; R2, of the sphere with the Earth's surface, for
// areas. Against the ellipsoid both are within 0.6 %.
const (
	meanRadiusKM       = 6371.0087714
	equalAreaRadiusKM  = 6371.0071810
	hectaresPerSquareK = 100
)

// direction is a point on the unit sphere.
type direction [3]float64

func directionOf(latitude, longitude float64) direction {
	sinLat, cosLat := math.Sincos(latitude * math.Pi / 180)
	sinLon, cosLon := math.Sincos(longitude * math.Pi / 180)
	return direction{cosLat * cosLon, cosLat * sinLon, sinLat}
}

// chord2 is the square of the straight line between two points of the unit
// sphere. It grows with the distance and costs no trigonometry, so it serves
// to leave out what is too far.
func chord2(a, b direction) float64 {
	x, y, z := a[0]-b[0], a[1]-b[1], a[2]-b[2]
	return x*x + y*y + z*z
}

// chord2Of is chord2 of a great-circle distance in km.
func chord2Of(km float64) float64 {
	c := 2 * math.Sin(math.Min(km/(2*meanRadiusKM), math.Pi/2))
	return c * c
}

// distanceKM is the great-circle distance in km: 2 R asin(chord/2). It is the
// haversine formula (Sinnott 1984, Sky and Telescope 68:159, from memory),
// whose haversine is (chord/2)^2, so it keeps its precision at short range.
func distanceKM(a, b direction) float64 {
	return 2 * meanRadiusKM * math.Asin(math.Min(1, math.Sqrt(chord2(a, b))/2))
}

// ringArea is the signed area in km2 a closed ring encloses on the sphere,
// positive counterclockwise: R^2 sum (lon2 - lon1)(sin lat1 + sin lat2)/2 with
// the sign turned (Chamberlain and Duquette 2007, JPL Publication 07-03, from
// memory). An edge is a straight line in the cylindrical equal-area
// projection; for an edge of a kilometre that is a great circle to within
// centimetres. Exact for parallels and meridians.
func ringArea(ring []Position) float64 {
	// Sines are taken from the first corner's, lest a hectare drown in the
	// rounding of the hemisphere beneath it.
	var sum, base float64
	if len(ring) > 0 {
		base = math.Sin(ring[0].latitude())
	}
	for i := 1; i < len(ring); i++ {
		from, to := ring[i-1], ring[i]
		sum += (to.longitude() - from.longitude()) * (math.Sin(from.latitude()) - base + math.Sin(to.latitude()) - base) / 2
	}
	return -equalAreaRadiusKM * equalAreaRadiusKM * sum
}

func (p Position) longitude() float64 { return p[0] * math.Pi / 180 }
func (p Position) latitude() float64  { return p[1] * math.Pi / 180 }

// planarRing returns the signed planar area of a ring in square degrees (RFC
// 7946 counts counterclockwise as positive) and its centroid, by the shoelace
// formula, from its first corner.
func planarRing(ring []Position) (area, longitude, latitude float64) {
	if len(ring) == 0 {
		return 0, math.NaN(), math.NaN()
	}
	o := ring[0]
	var sx, sy float64
	for i := 1; i < len(ring); i++ {
		x0, y0 := ring[i-1][0]-o[0], ring[i-1][1]-o[1]
		x1, y1 := ring[i][0]-o[0], ring[i][1]-o[1]
		cross := x0*y1 - x1*y0
		area += cross / 2
		sx += (x0 + x1) * cross / 6
		sy += (y0 + y1) * cross / 6
	}
	if area == 0 {
		return 0, o[0], o[1]
	}
	return area, o[0] + sx/area, o[1] + sy/area
}
