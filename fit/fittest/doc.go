// Package fittest holds data of known truth for testing estimators.
package fittest
