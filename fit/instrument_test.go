package fit_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
)

// As many instruments as parameters, r1 and r2: exact arithmetic (Söderström & Stoica 1983).
func TestInstrumentExact(t *testing.T) {
	d := fittest.D2()
	r, err := fit.Instrument(record(d), [][]float64{d.R}, fit.InstrumentOptions{NA: 1, NB: 1, Delay: 1, Lags: 2, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "a", -r.A[1], 1.20464532432682, 1e-10)
	near(t, "b", r.B[1], 0.491796849505829, 1e-10)
}

// An unstable plant under coloured noise in closed loop. Least squares puts the pole at
// a + c lambda/Ry = 1.4583, in closed form and in simulation (Söderström & Stoica 1989, on errors in regressors), and
// its interval excludes the truth; the instruments do not, and their intervals cover: of 400 trials 362 to 396 have a
// false alarm probability of 7e-5.
func TestInstrumentUnderColouredNoise(t *testing.T) {
	const trials, n = 400, 1000
	hitA, hitB := 0, 0
	var leastSquares, instrument, variance, claimed float64
	for k := range trials {
		rnd := rand.New(rand.NewPCG(10, uint64(k)))
		rec := fit.Record{U: make([]float64, n), Y: make([]float64, n)}
		r := make([]float64, n)
		y, u, e1 := 0.0, 0.0, 0.0
		for i := range n {
			e := math.Sqrt(1.0/3) * rnd.NormFloat64()
			r[i] = float64(2*rnd.IntN(2) - 1)
			y = 1.25*y + 0.5*u + e + 0.5*e1
			u = r[i] - 2*y
			e1 = e
			rec.U[i], rec.Y[i] = u+5, y-2
		}
		m, err := fit.FitARX([]fit.Record{rec}, fit.ARXOptions{NA: 1, NB: 1, Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		leastSquares += -m.A[1] / trials
		iv, err := fit.Instrument([]fit.Record{rec}, [][]float64{r}, fit.InstrumentOptions{NA: 1, NB: 1, Delay: 1, Lags: 4})
		if err != nil {
			t.Fatal(err)
		}
		instrument += -iv.A[1] / trials
		variance += (-iv.A[1] - 1.25) * (-iv.A[1] - 1.25) / trials
		claimed += iv.Cov.At(0, 0) / trials
		if math.Abs(-iv.A[1]-1.25) < 1.96*math.Sqrt(iv.Cov.At(0, 0)) {
			hitA++
		}
		if math.Abs(iv.B[1]-0.5) < 1.96*math.Sqrt(iv.Cov.At(1, 1)) {
			hitB++
		}
	}
	near(t, "least squares", leastSquares, 1.458333333, 0.01)
	// Five standard deviations of the mean, and a part in 100 for the instruments being 4 in 1000 rows.
	near(t, "instruments", instrument, 1.25, 5*math.Sqrt(variance/trials)/1.25+0.01)
	near(t, "variance", claimed, variance, 0.3)
	if hitA < 362 || hitA > 396 || hitB < 362 || hitB > 396 {
		t.Errorf("covered %d and %d times of %d", hitA, hitB, trials)
	}
}

// The first coefficient of A on rigs of all kinds, one interval of 95 % for each of 240 records: a perfect method covers 216
// or more with probability 0.9994. (The coefficients of one record hang together, so that only one counts.)
func TestInstrumentOnRigs(t *testing.T) {
	hits, total := 0, 0
	for i, rig := range fittest.Rigs() {
		truth := rig.Truth()
		n := len(truth.A) - 1
		for k := range 40 {
			u, y, r := rig.RecordWithDither(2000, uint64(20+i), uint64(k))
			iv, err := fit.Instrument([]fit.Record{{U: u, Y: y}}, [][]float64{r},
				fit.InstrumentOptions{NA: n, NB: n, Delay: 1, Lags: 40, Filter: truth.C})
			if err != nil {
				t.Fatalf("%s: %v", rig.Name, err)
			}
			if !(iv.Share > 0.1 && iv.Share <= 1) {
				t.Errorf("%s: least share %g", rig.Name, iv.Share)
			}
			total++
			if math.Abs(iv.A[1]-truth.A[1]) < 1.96*math.Sqrt(iv.Cov.At(0, 0)) {
				hits++
			}
		}
	}
	t.Logf("%d of %d covered", hits, total)
	if hits < 216 {
		t.Errorf("a_1 covered %d of %d times", hits, total)
	}
}

func TestInstrumentWithoutOutsidePower(t *testing.T) {
	d := fittest.D2z()
	_, err := fit.Instrument(record(d), [][]float64{d.R}, fit.InstrumentOptions{NA: 1, NB: 1, Delay: 1})
	var c fit.Condition
	if !errors.As(err, &c) {
		t.Errorf("outside signal zero: error %v, want Condition", err)
	}
}

func BenchmarkInstrument(b *testing.B) {
	rig := fittest.Rigs()[1]
	u, y, r := rig.RecordWithDither(10000, 1, 1)
	for b.Loop() {
		if _, err := fit.Instrument([]fit.Record{{U: u, Y: y}}, [][]float64{r},
			fit.InstrumentOptions{NA: 2, NB: 2, Delay: 1, Filter: rig.Truth().C}); err != nil {
			b.Fatal(err)
		}
	}
}
