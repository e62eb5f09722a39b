package ident

import (
	"context"
	"runtime"
	"sync"

	"golang.org/x/sync/errgroup"
)

// Each runs f for 0 … n-1 in at most so many goroutines (0: one per core) and returns the first error, ctx's among
// them: it is asked before every call. A panic in f is raised again in the goroutine of the caller, who can recover
// it; left in its own it would end the program at once.
func Each(ctx context.Context, n, workers int, f func(i int) error) error {
	group, within := errgroup.WithContext(ctx)
	if workers <= 0 {
		workers = runtime.GOMAXPROCS(0)
	}
	group.SetLimit(workers)
	var once sync.Once
	var panicked any
	for i := range n {
		group.Go(func() error {
			defer func() {
				if v := recover(); v != nil {
					once.Do(func() { panicked = v })
				}
			}()
			if err := within.Err(); err != nil {
				return err
			}
			return f(i)
		})
	}
	err := group.Wait()
	if panicked != nil {
		panic(panicked)
	}
	return err
}
