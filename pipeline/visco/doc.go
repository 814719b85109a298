// Package visco fits models of linear viscoelasticity to a complex modulus
// measured at several frequencies, and laws of decay to a tension measured
// after a step.
//
// Start with Rank, which fits every model to a series and orders them;
// Bootstrap, Ranking.Crossover, KramersKronig and FitDecay answer the other
// questions. LeastSquares is the solver under them all. Units are SI (N/m for
// moduli of a surface, s, Hz); K* = K' + i K” with K” > 0 for a passive
// material under e^(iwt). Nothing here knows of files; series of points and
// random seeds come in, numbers go out, and the same input gives the same
// output.
//
// Invariants. Parameters are positive, and exponents lie between 0 and 1, by
// construction: the solver works on their logarithms and logits, within bounds
// that lie far beyond what the frequencies can tell. Every model is fitted from
// several starts. Models are ordered by the corrected Akaike criterion; where
// the second best is nearly as good, Ranking.Decided is false, and a caller
// must say that the data cannot tell. What the data do not tell has no standard
// uncertainty (NaN), and a crossover outside the data is a bound, not a number.
//
// Left out: nonlinear viscoelasticity; models with more parameters than a
// handful of frequencies can tell, apart from WiderModels; correlated noise
// between frequencies, which a common scale error of the force would make and
// which changes no phase.
package visco
