// Package visco fits models of linear viscoelasticity to a complex modulus
// measured at several frequencies, and laws of decay to a tension measured
// after a step.
//
// Start with Rank, which fits every model to a series and orders them;
// Crossover, KramersKronig and Decay answer the other questions. LeastSquares
// is the solver under them all.
//
// Parameters are positive, and exponents lie between 0 and 1, by construction:
// the solver works on their logarithms (and logits). Every model is fitted from
// several starts. Models are ordered by the corrected Akaike criterion; where
// the second best is nearly as good, Ranking.Decided is false, and a caller
// must say that the data cannot tell.
//
// Left out: nonlinear viscoelasticity, and models with more parameters than a
// handful of frequencies can tell.
package visco
