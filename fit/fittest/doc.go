// Package fittest holds data of known truth for testing estimators: deterministic integer data sets (Set), simulated
// closed-loop rigs with their sampled truth and Cramér-Rao bounds (Rig), and one suite that every estimator of poles can
// run (Conformance). All rigs and numbers are invented.
package fittest
