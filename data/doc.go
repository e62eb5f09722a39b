// Package data turns what a rig's owner has, a rig file and logs, into experiments: plain numbers in stretches of
// constant period, with everything that is wrong with them listed.
package data
