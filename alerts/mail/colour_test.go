package mail

import (
	"cmp"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"

	"saprolite/alerts"
	"saprolite/detectors/finding"
)

// CIE 1976 L* of sRGB (IEC 61966-2-1; from memory), and WCAG 2.2 section
// 1.4.11: a shape that says something has a contrast of 3:1 with its ground.
func TestColoursDifferInLightness(t *testing.T) {
	luminance := func(css string) (y float64) {
		n, err := strconv.ParseUint(strings.TrimPrefix(css, "#"), 16, 24)
		if err != nil {
			t.Fatal(err)
		}
		for i, weight := range []float64{0.2126, 0.7152, 0.0722} {
			c := float64(n>>(16-8*i)&0xff) / 255
			if c > 0.04045 {
				y += weight * math.Pow((c+0.055)/1.055, 2.4)
			} else {
				y += weight * c / 12.92
			}
		}
		return y
	}
	lightness := func(m alerts.Message) float64 {
		y := luminance(string(colour(m)))
		if contrast := 1.05 / (y + 0.05); contrast < 3 {
			t.Errorf("%s %s: contrast %.2f with white, want 3", m.MsgType, m.Level, contrast)
		}
		return 116*math.Cbrt(y) - 16 // above y = 0.009, which all are
	}
	var steps []float64
	for _, l := range []finding.Level{finding.DrawingDown, finding.Low, finding.NearlySpent, finding.Spent} {
		steps = append(steps, lightness(alerts.Message{MsgType: alerts.Alert, Level: l}))
	}
	if !slices.IsSortedFunc(steps, func(a, b float64) int { return cmp.Compare(b, a) }) {
		t.Errorf("lightness %v does not fall from level to level", steps)
	}
	steps = append(steps, lightness(alerts.Message{MsgType: alerts.Alert, Level: finding.Blind}), lightness(alerts.Message{MsgType: alerts.Cancel, Level: finding.Spent}))
	slices.Sort(steps)
	for i := range steps[1:] {
		if steps[i+1]-steps[i] < 6 {
			t.Errorf("lightness %.1f and %.1f are too near", steps[i], steps[i+1])
		}
	}
}
