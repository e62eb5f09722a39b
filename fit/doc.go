// Package fit estimates models of a sampled plant from records of its input and output, in closed loop or open: numbers
// in, numbers out. It knows no file, unit or rig, and takes no decision of policy.
//
//	symbol    meaning                                                      unit
//	u_k, y_k  input and output of sample k                                 the record's
//	e_k       prediction error, what the past does not tell of y_k         that of y
//	z^-1      delay by one sample
//	A, B, C   polynomials in z^-1: A y = B u + C e; A[i] multiplies y_{k-i}
//	n, NA ... orders
//	omega     angular frequency                                            rad/s
//	period    time from sample to sample                                   s
//
// A Record is a stretch without a gap; U[k] acts from Y[k] on, so that b_1 is the first coefficient of B that is not zero.
// Records are fitted together, each with its own constant, and nothing is carried over between them.
// Outputs that a record lists as missing are unknowns of the likelihood; Predictor.Outliers tells which ought to be.
//
// # From records to a plant
//
//  1. ChooseARX, LongARX: a long model by least squares (FitARX), consistent in closed loop as its order grows past the
//     memory of the predictor.
//  2. NullSpace: low-order A, B, C from the long model; asymptotically efficient in that form, with covariance and a test
//     of the orders. The cost does not depend on the rows. Discrepancy makes the same yardstick available for any other
//     parametrisation.
//  3. Subspace: a state-space model by another road, whose singular values show the order, with the covariance of its
//     characteristic polynomial.
//  4. Predictor: prediction-error estimates of a continuous-time numerator, denominator and delay.
//  5. Predictor.Refined: the same numerator, denominator and delay through signals from outside alone, whatever the
//     noise. Predictor.Compare tests whether the two differ by more than chance.
//
// Estimators holds the four of these that find a plant's poles behind one interface: a denominator in powers of z - 1 with its
// covariance (PoleEstimate), so that they can be compared with one another where poles meet, too. Package conform runs
// all of them on rigs of every kind.
//
// Changes tells where a sequence of estimates of the same numbers changed.
//
// LjungBox, PastInputs, CrossCorrelation and FTest judge residuals; Welch estimates spectra. The quotient of the spectra
// of y and u is not the plant in closed loop.
//
// # Invariants
//
// Slices that are passed in are never changed. There is no randomness: the same records give the same bits, whatever the
// number of cores. Data that cannot determine what is asked come back as a Condition, with the answer where there is one; a
// caller's mistake panics.
//
// # What is not promised
//
// The covariances hold for the structure that was fitted: a plant of another order, a nonlinear one or wrongly paired
// columns bias the estimate without widening them. Influence gives the spread about the best model of that structure, and no
// more. That of NullSpace is that of long records: below some twenty memories
// of the predictor it is too small.
package fit
