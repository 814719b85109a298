// Package harmonic fits a sinusoid, its harmonics and a slow trend to one
// segment of a run and says how well each figure is known.
//
// Call RefineFrequency first, on the channel with the best signal-to-noise
// ratio, then FitSine with that frequency on all channels, then Modulus for the
// complex ratio of two of them. MeanSlope is for segments without oscillation.
// Accumulator is the least squares underneath.
//
// A segment comes as Points: each is the mean of W consecutive raw samples of
// an even time base with step Dt, and weighs W. The mean of cos(k w0 t) over W
// samples centred at t is D_k(W) cos(k w0 t) with the Dirichlet factor
//
//	D_k(W) = sin(k w0 W Dt/2) / (W sin(k w0 Dt/2)),
//
// and the mean of t^2 is t^2 + (W^2-1) Dt^2/12. Both stand in the basis, so
// condensing samples into points changes no amplitude and no phase.
//
// Conventions: x(t) = Re[X_k exp(i k w0 t)] with t = 0 where the caller's time
// is 0 s, so a response that leads has the larger argument. Trend polynomials
// are Legendre's over the segment, so the mean of the trend is its first
// coefficient.
//
// Uncertainties. Names with White are the textbook figures for independent
// noise. All other U… are the larger of that figure and one from the scatter of
// batches, which sees slow noise, and are widened so that +-2 U holds 95.45 %
// by Student's t. (The uncertainty of RefineFrequency is the textbook figure.)
// What they do not see, because nothing inside the segment shows it: noise
// slower than the segment, a constant error of a calibration, and a disturbance
// locked to the drive.
//
// Left out on purpose: windows (the fit has no leakage over whole or broken
// cycles), Fourier transforms, units, files. Arguments are float64 in any
// consistent units; time in s, frequency in Hz.
//
// Invariants: the result depends on the points and their order only; no input,
// NaN included, makes a function panic; a figure that cannot be estimated is an
// error or NaN, never zero.
//
// Sources: IEEE Std 1057 (three- and four-parameter sine fit), JCGM 100:2008
// (G.3, G.4, H.2), Golub and Van Loan, Matrix Computations (Householder QR and
// its updating).
package harmonic
