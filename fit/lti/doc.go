// Package lti is the ground that all rooms share: polynomials, transfer functions with delay, zeros-poles-gain, state
// space, frequency response, sampling behind a hold, interconnection, Nyquist's criterion, margins, matrix equations,
// and the one simulator of a sampled loop. It imports nothing of ours and knows no file, unit name or rig.
//
// # Symbols
//
//	symbol    meaning                                          unit            range
//	s         variable of the Laplace transform                rad/s           complex
//	z, q      shift by one sample; q = z^-1 in code            -               complex
//	omega, w  frequency                                        rad/s           (0, pi/Period] for sampled blocks
//	Period    sampling period, 0 means continuous in SS        s               > 0
//	Delay     from the input's change to the output            s               >= 0
//	Num, Den  TF: [i] multiplies s^i; DTF: [i] multiplies z^-i the log's       Den[0] = 1 in a DTF
//	A B C D   state space, n×n, n×m, p×n, p×m                  -               A, B, C nil when n = 0
//	u, y      input and output of the plant                    the log's       absolute in Law and Run
//	v         input of the inner loop                          output's        deviation from Y0
//	U0, Y0    operating point                                  the log's
//	C/D       noise shape, A y = B u + (C/D) e, monic in z^-1  -               stable; A the plant's denominator
//	e         innovation: white, one-step prediction error     output's
//	S, T      1/(1+L), L/(1+L), with negative feedback         -
//
// # Invariants
//
//   - Inputs are never changed; what is returned is new memory, except Poly.Trim, which shares.
//   - Complex roots and poles come in exactly conjugate pairs, sorted by real and then imaginary part.
//   - A mistake of the caller (shape, sign of a period, improper TF) panics with a constant; numbers that come from
//     data are refused with an error.
//   - Row k of a Run: y[k] is read, u[k] is computed from it and acts from then on (after the compute delay).
//   - Poles on the imaginary axis (unit circle) are passed on their unstable side: they count as stable open-loop poles
//     in Nyquist's criterion, and a closed-loop pole on the circle counts as unstable.
//   - A Trace ends with the step that tripped.
//   - Simulator and Run.Simulate are the same code and give the same bits.
//
// Not promised: the last digits of a DTF's poles near z = 1 (see DTF), roots of multiplicity m beyond eps^(1/m).
package lti
