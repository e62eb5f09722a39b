// Package design turns a model with its uncertainty into two loops with proof.
package design
