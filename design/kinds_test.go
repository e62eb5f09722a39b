package design

import (
	"errors"
	"math"
	"math/cmplx"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// A kind of plant, and what has to come of it: loops, or a refusal that says why.
type kind struct {
	testRig
	refused string // in the refusal; empty: loops
	often   bool   // in every run, not only in the study
}

// kinds are plants of all the kinds that are promised, all invented, in units of which the step is 1.
func kinds() []kind {
	rig := func(name string, truth lti.TF, period, settling, input float64) kind {
		r := testRig{
			name: name, truth: truth, relative: 0.01, period: period, compute: period / 5, sensor: 0.003, disturbance: input / 500,
			input: [2]float64{-input, input}, output: &[2]float64{-6, 6},
			spec: data.Spec{Step: 1, Overshoot: 0.25, Settling: settling, Band: 0.03, PeakSensitivity: 2.2},
		}
		r.spec.InputNoise = input / 5
		return kind{testRig: r}
	}
	pair := func(re, im float64) []complex128 { return []complex128{complex(re, im), complex(re, -im)} }
	poles := slices.Concat[[]complex128]
	with := func(k kind, change func(k *kind)) kind { change(&k); return k }
	often := func(k kind) kind { k.often = true; return k }
	refused := func(why string, k kind) kind { k.refused = why; return k }
	return []kind{
		rig("one real pole", fromRoots(4, nil, []complex128{2.2, -2.6}, 0), 0.03, 5, 20),
		rig("one real pole, first order", fromRoots(3, nil, []complex128{1.5}, 0), 0.03, 4, 20),
		rig("real pole, three lags", fromRoots(3*10*25*60, nil, []complex128{1.5, -10, -25, -60}, 0), 0.01, 5, 20),
		rig("real pole, light stable pair", fromRoots(2*144, nil, poles([]complex128{1}, pair(-0.5, 12)), 0), 0.01, 6, 20),
		rig("real pole, slow stable zero", fromRoots(4, []complex128{-0.4}, []complex128{1, -4}, 0), 0.03, 10, 20),
		often(rig("real pole, negative gain", fromRoots(-4, nil, []complex128{2.2, -2.6}, 0), 0.03, 5, 20)),
		rig("complex pair", fromRoots(260, []complex128{-5}, poles(pair(0.8, 9), []complex128{-18}), 0), 0.01, 2.5, 20),
		rig("complex pair, negative gain", fromRoots(-30, nil, pair(0.5, 4), 0), 0.02, 5, 20),
		rig("double pole", fromRoots(6, nil, []complex128{1.5, 1.5}, 0), 0.02, 5, 40),
		rig("two real poles", fromRoots(60, nil, []complex128{1, 2.5, -12}, 0), 0.01, 5, 60),
		rig("real pole and pair", fromRoots(40, []complex128{-2, -3}, poles([]complex128{1}, pair(0.4, 4)), 0), 0.01, 6, 60),
		rig("two pairs", fromRoots(40, []complex128{-2, complex(-0.5, 4), complex(-0.5, -4)}, poles(pair(0.2, 2), pair(0.2, 7)), 0), 0.01, 10, 60),
		often(rig("integrator and lag", fromRoots(4, nil, []complex128{0, -3}, 0), 0.03, 5, 20)),
		rig("double integrator", fromRoots(9, nil, []complex128{0, 0}, 0), 0.02, 4, 20),
		rig("integrator and real pole", fromRoots(6, []complex128{-1.5}, []complex128{0, 1, -8}, 0), 0.02, 8, 40),
		rig("undamped pair", fromRoots(25, nil, pair(0, 5), 0), 0.02, 4, 20),
		rig("undamped pair and lag", fromRoots(25*20, nil, poles(pair(0, 5), []complex128{-20}), 0), 0.01, 4, 20),
		with(rig("pole about the axis", fromRoots(2, nil, []complex128{0.02, -3}, 0), 0.05, 8, 20), func(k *kind) { k.relative = 0.05 }),
		rig("right-half-plane zero", fromRoots(-6, []complex128{4}, []complex128{-1, -5}, 0), 0.03, 6, 20),
		rig("right-half-plane zero and real pole", fromRoots(-2, []complex128{25}, []complex128{1.2, -9}, 0), 0.02, 8, 40),
		rig("right-half-plane zero and pair", fromRoots(-2, []complex128{40}, pair(0.4, 3), 0), 0.02, 6, 40),
		rig("delay of six samples", fromRoots(3, nil, []complex128{1, -6}, 0.17), 0.03, 8, 20),
		rig("delay of six samples, integrator", fromRoots(2, nil, []complex128{0}, 0.17), 0.03, 5, 20),
		rig("delay of twenty samples, stable", fromRoots(2, nil, []complex128{-1}, 0.39), 0.02, 8, 20),
		rig("delay of five samples, pair", fromRoots(9, nil, pair(0.3, 3), 0.09), 0.02, 8, 20),
		rig("stable", fromRoots(6, nil, []complex128{-1, -5}, 0), 0.03, 5, 20),
		refused("no stable controller holds this plant", often(rig("odd parity", fromRoots(5, []complex128{1}, []complex128{3, -10}, 0), 0.02, 8, 40))),
		refused("no stable controller holds this plant", rig("odd parity, zero at infinity", fromRoots(-5, []complex128{1}, []complex128{2, 3, 4, -10}, 0), 0.02, 8, 40)),
		refused("peak sensitivity", often(rig("zero next to the pole", fromRoots(-5, []complex128{2.3}, []complex128{2, -10}, 0), 0.02, 8, 40))),
		refused("peak sensitivity", often(rig("pole too fast for the delay", fromRoots(5, nil, []complex128{4, -10}, 0.25), 0.02, 4, 40))),
		refused("peak sensitivity", rig("pole too fast for the sampling", fromRoots(5, nil, []complex128{9, -10}, 0), 0.1, 4, 40)),
		refused("zero at s = 0", often(rig("no steady output", fromRoots(5, []complex128{0}, []complex128{1, -10}, 0), 0.02, 4, 40))),
		refused("reach above the operating point", with(rig("weak actuator", fromRoots(1, nil, []complex128{2.2, -2.6}, 0), 0.03, 5, 4), func(k *kind) { k.sensor = 1e-4 })),
	}
}

// Every kind of plant gives loops whose promise holds and that hold the true plant in the simulator, or is refused for a
// limit that is known. No figure of the loops is better than physics allows, and Bode's integral over the closed sampled
// loop, 1/(1 + G K1 (1 + K2)), is pi times the sum of the unstable poles (Sung & Hara (1988), Int. J. Control 48), to which
// the integrator adds nothing.
func TestAllKindsOfPlants(t *testing.T) {
	study := os.Getenv("STEADYRIG_STUDY") != ""
	for _, k := range kinds() {
		if !study && (!k.often || testing.Short()) || !strings.Contains(k.name, os.Getenv("STEADYRIG_KIND")) {
			continue
		}
		t.Run(k.name, func(t *testing.T) {
			m, rig := k.model(t), k.rig()
			began := time.Now()
			l, err := Design(t.Context(), m, rig, Options{Seed: 1, Plants: 1000})
			took := time.Since(began).Seconds()
			var no *ident.RefusedError
			if k.refused != "" {
				if !errors.As(err, &no) || !strings.Contains(no.What, k.refused) || l.Inner != nil {
					t.Errorf("%v", err)
				}
				return
			}
			if err != nil {
				for _, b := range l.Bounds {
					t.Logf("%s: %v, asked %v", b.Name, b.Value, b.Asked)
				}
				for _, f := range l.Forms {
					t.Logf("%+v", f)
				}
				t.Fatalf("%.1f s: %v", took, err)
			}
			q, law := l.Promise, l.LTI()
			if l.Verdict != Sound || q.Stable != q.Plants || q.LowerBound < PromisedShare {
				t.Errorf("verdict %q, promise %+v, warnings %q", l.Verdict, q, l.Warnings)
			}
			if held, spec := k.meets(t, k.truth, law); !held || !spec {
				t.Errorf("true plant: held %v, meets the spec %v", held, spec)
			}
			for _, b := range l.Bounds {
				got := math.Inf(1)
				switch b.Name {
				case BoundSampled, BoundDelay, BoundZero, BoundBandwidth:
					got = l.Margins.PlantInput.PeakSensitivity
				case BoundNoise:
					got = q.InputNoise.Nominal
				case BoundDeadTime:
					got = q.Settling.Nominal
				case BoundReachUp, BoundReachDown:
					got = b.Value - q.Recoverable + b.Value // at most b.Value
				}
				if !(got >= b.Value*(1-1e-3)) {
					t.Errorf("%s: %v, physics allows %v", b.Name, got, b.Value)
				}
			}
			counted, unstable := 0, 0.0
			for _, c := range q.UnstablePoles {
				counted += c.Plants
			}
			if counted != q.Plants {
				t.Errorf("%d of %d plants counted: %+v", counted, q.Plants, q.UnstablePoles)
			}
			for _, s := range k.truth.Poles() {
				unstable += math.Max(0, real(s))
			}
			loops, err := lti.NewTwoLoops(k.truth, k.compute, law)
			if err != nil {
				t.Fatal(err)
			}
			if got := bodeIntegral(loops, k.period); math.Abs(got-math.Pi*unstable) > 2e-3*math.Pi/k.period {
				t.Errorf("Bode's integral %v, want %v", got, math.Pi*unstable)
			}
			t.Logf("%.1f s: %s, %s; peak |S| %.3f of %.3f, overshoot %.3f, settling %.3g; %v", took, l.InnerForm, l.OuterForm,
				l.Margins.PlantInput.PeakSensitivity, leastOf(l.Bounds), q.Overshoot.Worst, q.Settling.Worst, q.UnstablePoles)
		})
	}
}

// bodeIntegral integrates ln|S| at the plant input from 0 to pi/T, rad/s, in equal steps of the logarithm at low and of the
// frequency at high ones.
func bodeIntegral(loops lti.TwoLoops, period float64) float64 {
	f := func(w float64) float64 { return -math.Log(cmplx.Abs(1 + loops.LoopAtInput(w))) }
	sum, end := 0.0, math.Pi/period
	lo := 1e-6 * end
	before := f(lo)
	for w := lo; w < end; {
		next := math.Min(math.Min(w*1.01, w+end/4000), end)
		now := f(math.Min(next, end*(1-1e-12)))
		sum += (now + before) / 2 * (next - w)
		w, before = next, now
	}
	return sum
}
