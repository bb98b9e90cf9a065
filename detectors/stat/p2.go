package stat

import "slices"

// P2 follows one quantile of a stream of values with five markers and no
// storage of the values: the P-square algorithm (Jain and Chlamtac 1985,
// Commun. ACM 28:1076-1085). It is exact up to five values and deterministic.
// The fields are its state, to be kept and restored as they are.
type P2 struct {
	_ struct{} `cbor:",toarray"`

	Quantile float64    // 0..1
	Count    int32      // values seen
	Height   [5]float64 // marker heights, q in the paper
	Position [5]int32   // marker positions, n in the paper, counted from 1
}

// Init begins anew for a quantile between 0 and 1.
func (p *P2) Init(quantile float64) { *p = P2{Quantile: quantile, Position: [5]int32{1, 2, 3, 4, 5}} }

// Add takes in one value. NaN must not be added.
func (p *P2) Add(x float64) {
	if p.Count < 5 {
		i, _ := slices.BinarySearch(p.Height[:p.Count], x)
		copy(p.Height[i+1:p.Count+1], p.Height[i:p.Count])
		p.Height[i] = x
		p.Count++
		return
	}
	p.Count++
	// Box 1, B1: the cell the value falls into; B2: move the markers above it.
	q, n := &p.Height, &p.Position
	cell := 3
	switch {
	case x < q[0]:
		q[0], cell = x, 0
	case x >= q[4]:
		q[4] = x
	default:
		for cell = 0; x >= q[cell+1]; cell++ {
		}
	}
	for i := cell + 1; i < 5; i++ {
		n[i]++
	}
	// B3: bring the middle markers nearer to where they should be.
	for i := 1; i <= 3; i++ {
		want := 1 + float64(p.Count-1)*[5]float64{0, p.Quantile / 2, p.Quantile, (1 + p.Quantile) / 2, 1}[i]
		off := want - float64(n[i])
		step := int32(0)
		if off >= 1 && n[i+1]-n[i] > 1 {
			step = 1
		} else if off <= -1 && n[i-1]-n[i] < -1 {
			step = -1
		}
		if step == 0 {
			continue
		}
		h := p.parabolic(i, float64(step))
		if !(q[i-1] < h && h < q[i+1]) {
			h = q[i] + float64(step)*(q[i+int(step)]-q[i])/float64(n[i+int(step)]-n[i])
		}
		q[i] = h
		n[i] += step
	}
}

// parabolic is the paper's piecewise-parabolic prediction (eq. in box 1, B3).
func (p *P2) parabolic(i int, d float64) float64 {
	q := &p.Height
	left, here, right := float64(p.Position[i-1]), float64(p.Position[i]), float64(p.Position[i+1])
	return q[i] + d/(right-left)*((here-left+d)*(q[i+1]-q[i])/(right-here)+(right-here-d)*(q[i]-q[i-1])/(here-left))
}

// Value returns the quantile's estimate; ok is false before the first value.
func (p *P2) Value() (v float64, ok bool) {
	if p.Count == 0 {
		return 0, false
	}
	if p.Count < 5 {
		i := min(int(p.Quantile*float64(p.Count)), int(p.Count)-1)
		return p.Height[i], true
	}
	return p.Height[2], true
}
