// Package fittest holds data of known truth for testing estimators: deterministic integer data sets (Set), simulated
// closed-loop rigs of every kind with their sampled truth (Rig). The suite that every fit.Estimator
// has to pass on all of them is package conform. All rigs and numbers are invented.
package fittest
