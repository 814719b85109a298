// Package cortex tells bulk from shear stiffness of a cell's cortex. A round
// cell squeezed between parallel plates answers a small change of height with
// one effective area modulus; how that grows with the squeeze depends on the
// area bulk modulus KB, the area shear modulus KS and the pre-tension gamma0 of
// the cortex. The package computes it (Effective, and Table for many) and turns
// it round: from the moduli of one cell at several heights and one frequency to
// KB*, KS* and the Poisson ratio with an honest interval, what limits it, and
// which further height would narrow it.
//
// Call NewTable once per process, then Table.Infer for each cell and frequency;
// Moduli.Next proposes a height. Pool joins the cells of a condition. Sheet
// converts between moduli and Poisson ratio.
//
// Left out: bending stiffness (a sheet of 0.2 um in a cell of 10 um radius),
// adhesion, gravity, any elasticity of the interior, finite amplitudes (3 % of
// the height change K_eff by under 0.25 % for eta <= 0.7 and 4 % at 0.9), scatter
// of single height ratios beside their common scale (put it into the moduli's
// uncertainties), an additive offset of all heights (over a range of heights it
// is much like a scale), and joining frequencies: each is fitted alone though
// they share scale and pre-tension.
//
// # Mechanics
//
// Classical linear membrane theory of shells of revolution (Timoshenko and
// Woinowsky-Krieger, Theory of Plates and Shells, ch. 14-15; from memory) with
// pre-tension. Complex moduli go in as they are (correspondence principle),
// gamma0 stays real.
//
// The reference state is the shape of package squeeze, of uniform tension
// gamma0 and constant mean curvature, in which the sheet is unstrained: tangent
// angle psi from 0 at the contact rim r = rc to pi/2 at the equator r = R,
//
//	2H = 2R/(R^2 - rc^2),  r = (sin psi + Q)/(2H),  Q^2 = sin^2 psi + (2H rc)^2,
//	ds/dpsi = r/Q,  kappa2 = sin psi/r,  kappa1 = 2H - kappa2.
//
// A change of height dh displaces it, per unit dh, by v along the meridian
// (rim to equator) and w along the outward normal. Strains and rotation, with '
// for d/ds:
//
//	e1 = v' + kappa1 w,  e2 = v cos psi/r + kappa2 w,  beta = kappa1 v - w'
//
// and increments of the tensions (per current length)
//
//	n1 + n2 = 2 KB (e1 + e2),   n1 - n2 = 2 KS (e1 - e2).
//
// Equilibrium along the meridian and along the normal (p1: change of pressure):
//
//	n1' = (cos psi/r)(n2 - n1)
//	gamma0 beta' = gamma0 kappa1 e1 + p1 - kappa1 n1 - kappa2 n2
//	               - gamma0 (beta cos psi/r - u sin psi/r^2),  u = v cos psi + w sin psi
//
// which are the stationarity conditions of the energy's second variation,
//
//	E'' = Int [KB (e1+e2)^2 + KS (e1-e2)^2] dA
//	      + gamma0 Int [w'^2 - (kappa1^2 + kappa2^2) w^2] dA,
//
// at constant volume. Boundary conditions, seen from the mid-plane: at the
// equator v = 0 and beta = 0; at the rim w = 1/2, the plate's displacement. The
// contact disc stays flat, slides and stretches uniformly by v/rc (adding its
// own area strain energy); with stuck plates v(rim) = 0 instead. The rim rolls
// along the sheet by -beta/kappa1, which costs energy of third order only and so
// needs no condition. Volume: Int w dA over half the free surface = -pi rc^2/2.
//
// With A the whole area, D = F/gamma = -dA/dh and gamma_eff = F/D, the modulus
// that an experimenter reads off is
//
//	K_eff = (dgamma_eff/dh)/(dlnA/dh) = (A/D^2) (E'' - gamma0 A'').
//
// # Method
//
// Without shear stiffness the solution is known: the shape of uniform tension
// at the new height, with uniform area strain, whatever KB and gamma0. The
// kernel writes every displacement as that one plus y. Because it is stationary
// for the KB and the gamma0 part separately, nothing cancels:
//
//	K_eff = KB k0 + (4 pi A/D^2) [KS s00 - KS^2 s.(KB B + KS S + gamma0 G)^-1 s]
//
// with k0 = 1 (A/(A - 2 A_con) for stuck plates), S, B, G the three quadratic
// forms on y, s the coupling of y to the known displacement by shear. The space
// of y is spanned by polynomials in the graded variable t, psi = a sinh(b t)
// (Ritz method), so convergence is geometric. As gamma0 falls to 0, K_eff falls
// to KB as (gamma0/Y)^(3/4), Y = 4 KB KS/(KB+KS), while a layer of width
// (gamma0/Y)^(1/4) forms at the rim; the grading follows it down to 1e-6 Y.
//
// Invariants kept here, each with a test: KS = 0 gives KB (k0 KB when stuck) to
// rounding; KB <= K_eff without friction; K_eff rises and is concave in KS and
// gamma0; dK_eff/dKS = (A/D^2) Int (e1-e2)^2 dA; an interval of the Poisson
// ratio lies within -1..1 and says where the data do not close it.
package cortex
