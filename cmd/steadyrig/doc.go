// Steadyrig turns closed-loop logs of an unstable rig into a plant model with bounds, an inner loop that stabilises,
// an outer loop that meets a spec, and a proof of both in the loop that will run.
//
// Each command maps its flags to the options of one library call and shows the result: as text for a person, or as
// one JSON document. Nothing here computes; see the packages data, ident and design.
//
// # Exit status
//
//	0    done
//	1    a fault in the tool
//	2    the call or an input file is wrong
//	3    the data or the physics say no; the partial result is still written and printed
//	130  interrupted
//
// # Environment
//
// NO_COLOR turns off colour on a terminal. SOURCE_DATE_EPOCH (seconds since 1970) replaces the clock in all that is
// written, so that the same call with the same seed gives the same bytes.
package main
