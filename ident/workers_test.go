package ident

import "testing"

// A panic among the workers reaches the caller's goroutine.
func TestWorkersPanic(t *testing.T) {
	defer func() {
		if v := recover(); v != "bad plant" {
			t.Errorf("recovered %v", v)
		}
	}()
	err := Each(t.Context(), 40, 3, func(i int) error {
		if i == 7 {
			panic("bad plant")
		}
		return nil
	})
	t.Errorf("no panic, error %v", err)
}
