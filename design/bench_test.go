package design

import "testing"

// The stages of a design, each on what those before it gave, and the whole of it.
func BenchmarkStages(b *testing.B) {
	for _, r := range testRigs() {
		b.Run(r.name, func(b *testing.B) {
			ctx, m, rig, opt := b.Context(), r.model(b), r.rig(), Options{Seed: 1}
			p, err := newProblem(m, rig)
			if err != nil {
				b.Fatal(err)
			}
			l, aim := p.newLoops(), p.aim(1, p.spec.settling)
			t := tuner{p: p, inner: InnerForms(), outer: OuterForms()}
			var inners []innerResult
			var best pair
			for _, stage := range []struct {
				name string
				run  func() error
			}{
				{"bounds", func() error {
					l.Bounds = p.bounds(ctx, p.drawTFs(boundDraws, streamBounds, opt.Seed))
					return nil
				}},
				{"pool", func() (err error) {
					t.pool, err = p.pool(ctx, tuningPool, stream(opt.Seed, streamTuning, 0), 0)
					return err
				}},
				{"inner", func() (err error) {
					inners, err = p.tuneInner(ctx, t.inner, append([]plant{p.nominal}, t.pool[:tuningPlants]...), t.pool, 0)
					return err
				}},
				{"outer", func() error {
					_, err := t.tuneOuter(ctx, inners[max(0, simplestInner(inners))], aim)
					return err
				}},
				{"pair", func() (err error) { // inner and outer, and what the tails ask for
					if best, err = t.tune(ctx, l, pair{}, aim); err != nil {
						return err
					}
					return p.assemble(l, best, t.set)
				}},
				{"front", func() error { return t.front(ctx, l, best) }},
				{"proof", func() (err error) {
					l.Promise, err = p.prove(ctx, l.LTI(), opt, 1)
					return err
				}},
				{"whole", func() error {
					_, err := Design(ctx, m, rig, opt)
					return err
				}},
			} {
				if stage.name != "whole" { // the next stage needs it, though it be not measured
					if err := stage.run(); err != nil {
						b.Fatal(err)
					}
				}
				b.Run(stage.name, func(b *testing.B) {
					for b.Loop() {
						if err := stage.run(); err != nil {
							b.Fatal(err)
						}
					}
				})
			}
		})
	}
}
