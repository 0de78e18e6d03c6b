// Package psychometric estimates psychometric functions from trials and says how far
// the estimates can be trusted.
//
// The probability of a correct (or "yes") response at level x is
//
//	P(x) = g + (1 − g − l) F(β (z − α)),    z = log10 x or x
//
// with guess rate g, lapse rate l, location α on the scale of z, slope β > 0 and
// a standard function F (see Shape). With K correct responses in N trials at each
// level the log-likelihood, binomial coefficients left out, is
//
//	L = Σ K ln P(x) + (N − K) ln(1 − P(x)).
//
// Fit maximises L and gives standard errors, profile-likelihood intervals, the
// deviance against the saturated model, and a verdict (Result.Status) in plain words:
// an estimate that the data do not support is marked as not valid, and an interval
// that the data leave open stays open. Start reading at Fit and Model.
//
// General reference for the form with guess and lapse: Wichmann FA, Hill NJ (2001)
// The psychometric function: I. Fitting, sampling, and goodness of fit. Percept
// Psychophys 63:1293–1313.
package psychometric
