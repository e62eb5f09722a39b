// Package design goes from a model to loops: what physics allows, two loops tuned for every plant that the data
// allow, and the promise about them.
//
// # The law
//
// Two loops about an operating point (u0, y0), sampled every T seconds, in deviations:
//
//	v = K2 (F (r - y0) - (y - y0))   held within the outer limits
//	u = u0 + K1 (v - (y - y0))       held within the input's limits
//
// The inner loop K1 only stabilises, with as much margin as the plant allows. The outer loop K2 and the prefilter F
// then meet the spec. Seen from the plant the loop gain is G K1 (1 + K2), and this is where margins count.
//
//	G = B/A   plant with its delay, behind a zero-order hold; A, B in powers of z^-1
//	H = C/(A D)  shape of the noise: y = G u + H e
//	S         1/(1 + G K1 (1 + K2)), sensitivity at the plant input, both loops closed
//	p, z      unstable pole (rad/s), and where it lies in the z-plane, e^{pT}
//	d         samples from the input to its first effect on the output
//	tau       delay of the plant and of the computer together, s
//
// # Steps of Design
//
//  1. Bounds: limits that hold for any controller, each at the nominal model and, as a 95 % interval, over plants
//     drawn from the model. A limit is judged at the unfavourable end of its interval. A spec beyond one is refused
//     before any tuning, with the nearest spec that is within reach and what to change at the rig, with the number.
//     Before that, plants without a steady output or without a stable controller (parity interlacing) are refused.
//     The overshoot that one loop could not avoid is told and not asked: two loops and a prefilter are free of it.
//  2. Noise: |A H|^2 is split into white sensor noise and disturbance at the input where that fits (the reverse of
//     spectral factorisation); input_noise is about the sensor's part. Where it does not fit, the whole prediction
//     error counts, and a warning says so. H of an unstable plant has unstable poles, but they are the plant's, and
//     A cancels in K S H: nothing unstable is ever simulated open loop.
//  3. Inner loop: the forms of InnerForms. A lattice of rates, angles and gains, or of weights for the observer-based
//     one, finds starts on the nominal plant (signs included: nothing assumes a positive gain); simplexes polish them
//     for the least worst peak |S| over the tuning plants, with input noise, slow poles, forbidden zeros, a least
//     steady gain and a controller that is stable itself as constraints.
//  4. Outer loop: the forms of OuterForms, each with a first-order prefilter, tuned for the worst ratio of reached to
//     asked: overshoot, error after the settling time, peak |S|, input noise, use of the input, kick; where all are
//     met with a margin, for the least peak |S|, noise and effort.
//  5. Choice: pairs are tried from the simplest inner form on, and within it from the simplest outer one. The first is
//     taken that meets the spec with a margin and whose peak |S| on the nominal plant is within 25 % of the yardstick,
//     the least that any controllers reach under the same input noise; else the best. Loops.Choice says which it was.
//  6. The tuning set starts with the nominal plant and a few draws and grows by the worst of a pool as large as the
//     proof's draws, first for the inner loop alone, then for both. A second attempt draws a larger one: the plants of a
//     proof are never tuned on.
//  7. Outer limits: as wide as leaves the inner loop alone able to come through any step of v between them.
//  8. Proof on fresh draws, in the simulator of fit/lti: the loop that will run, see below.
//  9. Front: the pair is retuned for faster and slower steps, the outer form growing where it has to; points that are
//     neither faster nor take less effort (peak input and three deviations of its noise) than another are left out.
//  10. First closure: levels, hand-over and what faults look like, simulated at the nominal plant.
//
// Where the rig file asks for no settling time, the front is walked first, from a guess by the fastest unstable pole, and
// its knee is designed for: the point furthest below the chord in logarithms. Loops.Assumed says so.
//
// Controllers are tuned in continuous parameters and mapped by Tustin's rule, but for the observer-based one, which is
// designed on the sampled plant; plants are sampled exactly, with delays of any length. What is judged while tuning is
// the mapped controller in the sampled loop, so that this is a direct discrete design in other coordinates: the mapping
// approximates nothing and costs nothing. The tuner works on plain arrays (its counts of unstable poles are by the argument principle
// on a grid); every verdict is on the eigenvalues of the realised, interconnected blocks and on simulated runs. Only
// where a plant has more than 24 states, delay included, does the argument principle decide in the proof as well.
//
// # The promise
//
// Of n drawn plants m meet the whole spec. The promise is kept when the one-sided 95 % Clopper-Pearson bound on the
// share is at least 0.995 and no drawn plant is lost: 4 misses in 2000 are the most. A plant is lost when a pole of
// the interconnection, or of the inner loop alone, is not inside the unit circle, or when the step reaches the trip
// limits. A failed proof may be tried once more, with tighter targets and fresh plants; it then has half of the
// error, 2.5 %. The promise is conditional on the model's structure and covariance. A maximum over draws is not a
// theorem for the whole set. Where the model's residual tests fail (below 1e-6), or its test of linearity (below 1e-3),
// or its log is shorter than 20 predictor memories, the verdict is weak at most; residual tests below 1e-12 mean that
// the structure is wrong, and there is no promise.
//
// # The loop that will run
//
// Each drawn plant runs the step, and the kick, in both directions without noise; overshoot, settling, kick and trips
// count between the samples too, at instants close enough that a sine of the plant's fastest mode hides less than 2 %
// of its height. Limits, rate, delay and the steps in which input and output are rounded act in every run. The steps
// are those of [limits] input_resolution and output_resolution, or else of the grid on which the log's columns lie
// (evidence.resolution of the model). Then one more step under the identified noise: sensor noise and disturbance where
// these could be told apart, else the whole prediction error, as A y = B u + w with the density of w = (C/D) e. One
// plant in 50 runs on for a hundred settling times at rest, and its output may deviate by no more than 1.5 times what the
// linear loop says with q^2/12 for rounding. promise.conditions says which of these it was.
//
// Where the stopgap law is known and runs at the same period, the long run starts under it and is handed over. The
// rule (lti.LawState.Follow): while another law runs, what it sends is written into the inner controller's past outputs,
// as what a limit lets through is; v, written into the outer controller's past outputs, is the average over one settling
// time of (y - y0) + (u - u0)/K1(1), what a steady inner loop needs to send u at y. The first sample sends the last input
// of the stopgap law once more.
//
// first_closure.stop are levels that correct running at rest reaches in an hour with a probability of at most 1e-4, by
// the sum over the samples of that of a Gaussian signal of the expected deviation; none is given where it lies
// beyond limits, trips, or the offset from which the loops come back. Faults are the loops with the inner controller's
// sign turned, and the plant with a sample more of delay: growth time from the eigenvalues, times to the levels from
// runs under noise.
//
// # Zeros that are not allowed
//
// No zero of K1 or of 1 + K2 may lie within the 95 % region of a pole that may be unstable, widened by a quarter of
// its size; none of K1 at the integrator of K2. Verify applies the same rule to loops of any origin, and to unstable
// poles of controllers under zeros of the plant, of the other controller or of their own. It follows the closed loop's
// mode that such a pair leaves: an eigenvalue of the realised and joined blocks, its residue from a step at the plant
// input and from the identified noise, and the seconds until either has driven the output to its trip or the input to
// its limit. Where the loop is stable about the nominal plant, these are figures of the plant with its pole at the zero.
//
// # The user's own loops
//
// Controllers come as coefficients in z^-1 or as expressions (ParseController), in which no factor is ever cancelled.
// One in s is mapped by Tustin's rule, the same prewarped at crossover, matched poles and zeros, step and ramp invariance;
// taken is the mapping whose sampled closed loop has the least |S - Sc|, Sc that of the continuous controller, among those
// that hold the nominal plant. Loops read from a file and not verified are mapped by Tustin's rule.
//
// Their limits and rate count as far as the rig file's allow, and the trips stay where the rig file has them when their
// operating point is another.
//
// # Randomness
//
// Bounds, tuning and the two proofs draw from different streams of one seed. The same seed gives the same bytes,
// whatever the number of workers.
//
// # What is not done
//
// One input, one output. No unstable inner controller: plants that no stable one stabilises are refused with that
// sentence. Overshoot and settling in the promise are those of runs without noise. Delays of more than 500 samples are
// refused: e^(p tau) says no for an unstable plant, and a stable one gains nothing from samples that short.
package design
