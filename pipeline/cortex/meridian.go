package cortex

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/integrate/quad"

	"platen/pipeline/squeeze"
)

// meridian is the free profile of a squeezed round cell from the contact rim
// (tangent angle psi = 0) to the equator (psi = pi/2), at Gauss points of the
// graded variable t in 0..1 with psi = a sinh(b t), a sinh b = pi/2. Near the
// rim the profile changes over psi ~ 2 H rc and the cortex has a boundary
// layer; the grading resolves both. Lengths are in units of the sphere radius.
type meridian struct {
	rc, h2  float64 // contact radius; 2H, the sum of the principal curvatures
	contact float64 // area of one contact disc
	area    float64 // whole surface, both contact discs included
	force   float64 // F/gamma = -dA/dh at constant volume

	t, gauss       []float64 // Gauss points and weights on 0..1
	r, sin, cos    []float64 // distance from the axis; of psi
	kappa1, kappa2 []float64 // principal curvatures, meridional and circumferential
	metric         []float64 // ds/dt
	weight         []float64 // Gauss weight times r ds/dt: Int f r ds = sum of weight f
}

// newMeridian places the points of a cell at height ratio eta; layer is the
// length in psi over which they are crowded at the rim.
func newMeridian(eta, layer float64, points int) (*meridian, error) {
	if !(eta >= MinRatio && eta <= MaxRatio) {
		return nil, fmt.Errorf("height ratio %g: expected %g..%g, where the sheet mechanics is computed", eta, MinRatio, MaxRatio)
	}
	shape, err := squeeze.FromHeightRatio(eta)
	if err != nil {
		return nil, fmt.Errorf("shape at height ratio %g: %w", eta, err)
	}
	R, rc := shape.Equator, shape.Contact
	m := &meridian{rc: rc, h2: 2 * R / (R*R - rc*rc), contact: math.Pi * rc * rc,
		area: 4 * math.Pi * shape.Area, force: shape.Force,
		t: make([]float64, points), gauss: make([]float64, points)}
	quad.Legendre{}.FixedLocations(m.t, m.gauss, 0, 1)
	for _, s := range []*[]float64{&m.r, &m.sin, &m.cos, &m.kappa1, &m.kappa2, &m.metric, &m.weight} {
		*s = make([]float64, points)
	}
	a := min(m.h2*rc, layer, 1)
	b := math.Asinh(math.Pi / 2 / a)
	for i, t := range m.t {
		sh := math.Sinh(b * t)
		sin, cos := math.Sincos(a * sh)
		root := math.Hypot(sin, m.h2*rc)
		r := (sin + root) / m.h2
		m.r[i], m.sin[i], m.cos[i] = r, sin, cos
		m.kappa1[i], m.kappa2[i] = root/r, sin/r
		m.metric[i] = r / root * a * b * math.Sqrt(1+sh*sh)
		m.weight[i] = m.gauss[i] * r * m.metric[i]
	}
	return m, nil
}
