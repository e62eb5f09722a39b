package design

import (
	"math"
	"math/cmplx"
	"testing"

	"steadyrig/fit/lti"
)

// yardOf poses a plant with white sensor noise of standard deviation 1.
func yardOf(t *testing.T, g lti.TF, period, settling float64) *problem {
	t.Helper()
	p, err := newProblem(bare(g, period), bareRig(period, 0, settling))
	if err != nil {
		t.Fatal(err)
	}
	p.noise = noise{split: true, sensor: 1}
	return p
}

// yardPlants are of all kinds; times in s.
var yardPlants = []struct {
	name   string
	g      lti.TF
	period float64
	odd    bool // poles on the circle or double ones
}{
	{"lag", fromRoots(1, nil, []complex128{1}, 0), 0.2, false},
	{"levitated", fromRoots(40, nil, []complex128{1, -1.2, -8}, 0), 0.03, false},
	{"fast sampling", fromRoots(40, nil, []complex128{1, -1.2, -8}, 0), 0.002, false},
	{"pair", fromRoots(5, []complex128{-5}, []complex128{complex(0.2, 3), complex(0.2, -3), -6}, 0), 0.04, false},
	{"two real poles", fromRoots(3, nil, []complex128{1, 0.4, -4}, 0.05), 0.05, false},
	{"double pole", fromRoots(3, nil, []complex128{1, 1, -4}, 0.07), 0.05, true},
	{"three poles", fromRoots(3, nil, []complex128{1, complex(0.3, 2), complex(0.3, -2), -6}, 0.05), 0.05, false},
	{"delay of 5 and a part", fromRoots(2, nil, []complex128{1, -3}, 0.27), 0.05, false},
	{"delay of 40", fromRoots(2, nil, []complex128{1, -3}, 0.4), 0.01, false},
	{"pair with delay", fromRoots(5, nil, []complex128{complex(0.5, 3), complex(0.5, -3)}, 0.18), 0.03, false},
	{"right-half-plane zero", fromRoots(-2, []complex128{6}, []complex128{1, -9}, 0), 0.03, false},
	{"zero, two poles", fromRoots(-2, []complex128{9}, []complex128{1, 0.5, -9}, 0.03), 0.03, false},
	{"integrator", fromRoots(2, nil, []complex128{0, 1, -5}, 0.1), 0.04, true},
	{"undamped pair", fromRoots(2, nil, []complex128{3i, -3i, 1}, 0.1), 0.04, true},
	{"negative gain", fromRoots(-1, nil, []complex128{1, -2}, 0.1), 0.05, false},
	{"stable", fromRoots(1, nil, []complex128{-1, -2}, 0.1), 0.05, false},
	{"two integrators", fromRoots(1, nil, []complex128{0, 0, -5}, 0), 0.05, true},
}

// unstableInZ returns poles and zeros outside the unit circle.
func unstableInZ(p *problem) (poles, zeros []complex128) {
	for _, s := range p.nominal.tf.Poles() {
		if real(s) > 0 {
			poles = append(poles, cmplx.Exp(s*complex(p.period, 0)))
		}
	}
	for _, z := range (lti.DTF{Num: p.nominal.num, Den: p.nominal.den, Period: p.period}).Zeros() {
		if r := cmplx.Abs(z); r > 1+1e-6 && r < 1e4 {
			zeros = append(zeros, z)
		}
	}
	return poles, zeros
}

// Without a limit on the noise the yardstick is the value of the Nevanlinna-Pick problem (Sarason (1967); closed forms
// in TestLeastPeak…), and the quietest controller's noise comes from Szegő kernels (leastNoise). There both are found
// from Gram matrices, here from the compressed shift and from functions on the circle.
func TestYardstickClosedForms(t *testing.T) {
	for _, c := range yardPlants {
		p := yardOf(t, c.g, c.period, 4)
		poles, zeros := unstableInZ(p)
		want := leastPeakOracle(p.nominal.lag, poles, zeros)
		// 1e-8: a double pole comes out of its coefficients as two, 1e-9 apart.
		if lo, hi := p.leastPeakS(math.Inf(1)); lo != hi || !(math.Abs(lo-want) <= 1e-8*want) {
			t.Errorf("%s: least peak in [%.10g, %.10g], Nevanlinna-Pick gives %.10g", c.name, lo, hi, want)
		}
		least := leastNoise(append(make(lti.Poly, p.nominal.lag), p.nominal.num...), p.nominal.den, poles)
		y := p.newYard()
		k := make([]complex128, y.n)
		y.quadratic(k, make([]float64, y.n), 1)
		// A pole on the circle is a kink that the grid rounds off, a double one takes kernels that leastNoise has not;
		// 1e-4 for zeros just outside the circle, which are passed over.
		if got := y.noise(k); !c.odd && !(math.Abs(got-least) <= 1e-4*least) {
			t.Errorf("%s: least noise %.12g, Szegő kernels give %.12g", c.name, got, least)
		}
		if len(poles) == 0 {
			continue
		}
		// A louder S, mixed with the quietest, comes out at the limit.
		loud, w := make([]complex128, y.n), make([]float64, y.n)
		for j := range w {
			w[j] = 1
		}
		y.quadratic(loud, w, 1e-3/(least*least))
		limit := (y.noise(k) + y.noise(loud)) / 2
		share := complex(y.share(loud, k, limit), 0)
		for j, v := range loud {
			loud[j] += share * (k[j] - v)
		}
		if got := y.noise(loud); !(math.Abs(got/limit-1) < 1e-9) {
			t.Errorf("%s: noise %.10g of the mixture, want %.10g", c.name, got, limit)
		}
		if lo, hi := p.leastPeakS(0.9 * least); !math.IsInf(lo, 1) || !math.IsInf(hi, 1) {
			t.Errorf("%s: [%.4g, %.4g] with less noise than the least", c.name, lo, hi)
		}
		// More noise allowed, no larger peak; and no smaller one than without a limit.
		before := math.Inf(1)
		for _, times := range []float64{1.5, 3, 10, 100} {
			lo, hi := p.leastPeakS(times * least)
			if !(lo <= before && hi >= want*(1-1e-4) && hi <= lo*1.03) {
				t.Errorf("%s: [%.5g, %.5g] with %g times the least noise; %.5g with less, %.5g without limit", c.name, lo, hi, times, before, want)
			}
			before = hi
		}
	}
}

// A demand more cannot make the least peak smaller, and the law that sets it meets it.
func TestLeastPeakHolding(t *testing.T) {
	for _, r := range testRigs()[:4] {
		p, err := newProblem(r.model(t), r.rig())
		if err != nil {
			t.Fatal(err)
		}
		l := designed(t, r.name)
		f := p.frequency(&p.nominal, p.lawGrid(l.LTI()))
		free, _ := p.leastPeakS(f.noise)
		held := p.leastPeakHolding(f.noise*(1+1e-3), l.LTI())
		// The law itself is one of those that hold as well.
		if !(held >= free*(1-yardGap) && held <= l.Margins.PlantInput.PeakSensitivity) {
			t.Errorf("%s: %.5g with the pair's hold, %.5g without, the pair has %.5g", r.name, held, free, l.Margins.PlantInput.PeakSensitivity)
		}
	}
}

// The lag by another way: S = (1 - a q)(1 - q/a^3)/(1 - q/a)^2 (1 + q sum of c_k m^k), m = (q - r)/(1 - r q), is
// admissible for any coefficients. None of them gives the quietest loop, regulator and estimator with the pole mirrored
// (Kwakernaak & Sivan (1972), sec. 6.5). A simplex search over six, started afresh from where it ended, meets the limit
// by a penalty: it gets no lower than the lower bound, and as near to the upper one as six coefficients and a simplex do.
// The same with |S| held below that of the proportional law K, whose peak is at pi: a bound at each frequency, among which
// a simplex finds its way less well, so 4 % instead of 2 %.
func TestYardstickBySearch(t *testing.T) {
	p := yardOf(t, yardPlants[0].g, yardPlants[0].period, 4)
	a, b := complex(-p.nominal.den[1], 0), complex(p.nominal.num[0], 0)
	least := leastNoise(append(lti.Poly{0}, p.nominal.num...), p.nominal.den, []complex128{a})
	const terms, points, r = 6, 100, 0.5
	law := &lti.Law{Inner: lti.Gain(5*(real(a)-1)/real(b), p.period)}
	figures := func(x []float64) (peak, noise, held float64) {
		for j := range points {
			q := cmplx.Exp(complex(0, -math.Pi*(float64(j)+0.5)/points))
			sum, m := complex(0, 0), q
			for _, c := range x {
				sum += complex(c, 0) * m
				m *= (q - r) / (1 - r*q)
			}
			s := (1 - a*q) * (1 - q/(a*a*a)) / ((1 - q/a) * (1 - q/a)) * (1 + sum)
			peak = math.Max(peak, cmplx.Abs(s))
			ks := cmplx.Abs((1 - s) * (1 - a*q) / (b * q))
			noise += ks * ks / points
			held = math.Max(held, cmplx.Abs(s)/math.Hypot(heldWell, cmplx.Abs((1-a*q)/(1-a*q+b*q*complex(law.Inner.Num[0], 0)))))
		}
		return peak, math.Sqrt(noise), held
	}
	if _, noise, _ := figures(nil); math.Abs(noise/least-1) > 1e-9 {
		t.Fatalf("quietest loop: noise %.12g, want %.12g", noise, least)
	}
	for _, c := range []struct {
		times float64
		hold  bool
	}{{1.1, false}, {1.5, false}, {8, true}} {
		limit := c.times * least
		x := make([]float64, terms)
		for range 10 {
			x, _ = minimise(t.Context(), func(x []float64) float64 {
				peak, noise, held := figures(x)
				cost := peak + 30*math.Max(0, noise/limit-1)
				if c.hold {
					cost += 30 * math.Max(0, held-1)
				}
				return cost
			}, x, 0.1, 1000)
		}
		peak, noise, held := figures(x)
		lo, hi := p.leastPeakS(limit)
		near := 0.02
		if c.hold {
			free := hi
			near = 0.04
			lo = p.leastPeakHolding(limit, law)
			if hi = lo * (1 + yardGap); !(lo > free*1.05 && held < 1+1e-3) {
				t.Errorf("held: %.5g, without %.5g; the search holds by %.5g", lo, free, held)
			}
		}
		t.Logf("%+v: in [%.5f, %.5f], by search %.5f at %.5f of the limit", c, lo, hi, peak, noise/limit)
		if !(noise <= limit*(1+1e-3)) || !(peak >= lo*(1-1e-3)) || !(peak <= hi*(1+near)) {
			t.Errorf("%+v: in [%.5f, %.5f], by search %.5f at %.5f of the limit", c, lo, hi, peak, noise/limit)
		}
	}
}
