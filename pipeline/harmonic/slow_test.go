package harmonic

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// TestFlickerTable computes the figures of flickerTable from the spectrum
// S(f) = 1/f, f a multiple of 1/(4T): the covariance of the batch means is its
// cosine transform with the averaging factor of a batch (Wiener-Khinchin), and
// mean, slope and residuals are linear in the batch means.
func TestFlickerTable(t *testing.T) {
	for i, count := range []int{fewBatches, manyBatches} {
		const fine, segments = 64, 4
		n := segments * count * fine
		c := make([]float64, count)
		for j := 1; j <= n/2; j++ {
			x := math.Pi * float64(j) / float64(n)
			k := math.Sin(fine*x) / (fine * math.Sin(x))
			for lag := range c {
				c[lag] += k * k / float64(j) * math.Cos(2*x*fine*float64(lag))
			}
		}
		cov := mat.NewDense(count, count, nil)
		for a := range count {
			for b := range count {
				cov.Set(a, b, c[max(a-b, b-a)])
			}
		}
		for degree := range 3 {
			basis := mat.NewDense(count, degree+1, nil)
			slopeBasis := mat.NewDense(count, max(degree, 1)+1, nil)
			for b := range count {
				u := (float64(b)+0.5)/float64(count)*2 - 1
				for k, v := range []float64{1, u, (3*u*u - 1) / 2} {
					if k <= degree {
						basis.Set(b, k, v)
					}
					if k <= max(degree, 1) {
						slopeBasis.Set(b, k, v)
					}
				}
			}
			projector := func(x *mat.Dense) *mat.Dense {
				var g, inv, p mat.Dense
				g.Mul(x.T(), x)
				if err := inv.Inverse(&g); err != nil {
					t.Fatal(err)
				}
				p.Mul(&inv, x.T())
				return &p
			}
			p := projector(basis)
			var hat, m, tmp, res, pc, cc, sc, scc mat.Dense
			hat.Mul(basis, p)
			eye := mat.NewDiagDense(count, nil)
			for b := range count {
				eye.SetDiag(b, 1)
			}
			m.Sub(eye, &hat)
			tmp.Mul(&m, cov)
			res.Mul(&tmp, m.T())
			s2 := mat.Trace(&res) / float64(count-1-degree)
			var sq mat.Dense
			sq.Mul(&res, &res)
			pc.Mul(p, cov)
			cc.Mul(&pc, p.T())
			ps := projector(slopeBasis)
			sc.Mul(ps, cov)
			scc.Mul(&sc, ps.T())
			want := flicker{cc.At(0, 0) / s2, scc.At(1, 1) / s2, mat.Trace(&res) * mat.Trace(&res) / mat.Trace(&sq)}
			got := flickerTable[i][degree]
			t.Logf("%d batches, degree %d: {%.3f, %.3f, %.2f}", count, degree, want.mean, want.slope, want.dof)
			// The table is given to three digits.
			for _, v := range [][2]float64{{got.mean, want.mean}, {got.slope, want.slope}, {got.dof, want.dof}} {
				if math.Abs(v[0]-v[1]) > 6e-3*v[1] {
					t.Errorf("%d batches, degree %d: table %+v, spectrum %+v", count, degree, got, want)
					break
				}
			}
		}
	}
}
