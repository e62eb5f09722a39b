// Package published holds tests only: the public functions of fit, fit/lti, ident and design against what others
// published and computed. Every number stands beside its source, and all of them make the page testdata/published/README.md,
// which the tests compare with what they found; `go test ./fit/fittest/published -update` writes it anew.
package published
