// Package conform grades estimators of poles on the rigs of package fittest: against their Cramér-Rao bounds (Bound), in one
// suite that every fit.Estimator has to pass (Suite).
package conform

import (
	"fmt"
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

// Claim is what a method is said to reach on a kind of rig.
type Claim struct {
	Method string
	Rig    string // "": all rigs without a claim of their own
	// Error is the most that the root mean square error of any number may be, over the Cramér-Rao bound: of the
	// continuous-time structure for a method that is Structured, else with all sampled coefficients free.
	Error      float64
	Structured bool
	// Cover is the least probability with which the method's own 95 % interval of any number holds the truth. Below 0.95 the
	// method may lose numbers, too, and need not be consistent.
	Cover float64
	Why   string // of a claim for one kind of rig
}

// Suite runs every method on every rig: Short records of Rows rows each and Long ones of four times as many, the
// same for all methods. Beyond chance, which breaks a true claim once in 10 000 for each number, it demands of each
// method on each rig the errors and the coverage that it claims, and of each method over all rigs together coverage and an
// error that falls with the root of the rows.
type Suite struct {
	Rigs        []fittest.Rig // nil: fittest.Kinds()
	Rows        int
	Short, Long int
	Seed        uint64 // rig i is simulated from Seed + i
}

const chance = 1e-4

// Check logs one line for each method and rig: error over bound for each number, over that with sampled coefficients free
// in brackets, and how many intervals hold the truth.
func (c Suite) Check(t *testing.T, methods []fit.Estimator, claims []Claim) {
	rigs := c.Rigs
	if rigs == nil {
		rigs = fittest.Kinds()
	}
	fall := make([]float64, len(methods)) // sum over the rigs of the logarithm of long over short error
	fell := make([]int, len(methods))
	held, records := make([]int, len(methods)), make([]int, len(methods))
	for i, rig := range rigs {
		var before []Grade
		for k, trials := range []int{c.Short, c.Long} {
			grades, err := Run(rig, methods, c.Rows<<(2*k), trials, c.Seed+uint64(i))
			if err != nil {
				t.Fatal(err)
			}
			for j, g := range grades {
				t.Log(g)
				claim := claimOf(claims, g.Method, rig.Name)
				if claim == nil {
					t.Errorf("%s on %s: no claim", g.Method, rig.Name)
					continue
				}
				g.check(t, claim)
				if claim.Cover < confidence {
					continue
				}
				// One number a record: those of one record hang together.
				last := len(g.RMS) - 1
				held[j] += g.Covered[last]
				records[j] += trials
				if k == 1 {
					fall[j] += math.Log(g.RMS[last] / before[j].RMS[last])
					fell[j]++
				}
			}
			before = grades
		}
	}
	for j, m := range methods {
		// Too many is as wrong as too few; the misses are binomial, too.
		if least, most := leastOf(records[j], confidence), records[j]-leastOf(records[j], 1-confidence); held[j] < least || held[j] > most {
			t.Errorf("%s: %d of %d intervals hold the truth, want %d to %d", m.Name(), held[j], records[j], least, most)
		}
		// The logarithm of a root mean square of n normal errors has a deviation of about 1/sqrt(2n).
		sd := math.Sqrt((1/float64(c.Short) + 1/float64(c.Long)) / 2 / float64(fell[j]))
		if ratio, most := math.Exp(fall[j]/float64(fell[j])), 0.5*math.Exp(3.7*sd); !(ratio <= most) {
			t.Errorf("%s: error at four times the rows is %.2f of that at %d, want 0.5 and at most %.2f", m.Name(), ratio, c.Rows, most)
		}
		t.Logf("%-10s  over all rigs %d of %d intervals hold the truth", m.Name(), held[j], records[j])
	}
	for _, c := range claims {
		if c.Why != "" {
			t.Logf("%-10s  %-25s  claims %.3g of the bound, coverage %.3g: %s", c.Method, c.Rig, c.Error, c.Cover, c.Why)
		}
	}
}

func claimOf(claims []Claim, method, rig string) (found *Claim) {
	for i, c := range claims {
		if c.Method == method && (c.Rig == rig || c.Rig == "" && found == nil) {
			found = &claims[i]
		}
	}
	return found
}

func (g *Grade) check(t *testing.T, c *Claim) {
	ratio := g.Free
	if c.Structured {
		ratio = g.Ratio
	}
	for j, v := range ratio {
		n := g.Trials - g.Lost[j]
		if c.Cover == confidence && n < g.Trials {
			t.Errorf("%s on %s, %d rows: number %d lost in %d of %d records", g.Method, g.Rig, g.Rows, j, g.Lost[j], g.Trials)
		}
		// The mean square of n normal errors is chi-squared over n.
		most := c.Error * math.Sqrt(distuv.ChiSquared{K: float64(max(1, n))}.Quantile(1-chance)/float64(max(1, n)))
		if n > 0 && !(v <= most) {
			t.Errorf("%s on %s, %d rows: error of number %d is %.2f of the bound, at most %.2f for a claim of %g", g.Method, g.Rig, g.Rows, j, v, most, c.Error)
		}
		if least := leastOf(g.Trials, c.Cover); g.Covered[j] < least {
			t.Errorf("%s on %s, %d rows: %d of %d intervals of number %d hold the truth, want %d for a claim of %g", g.Method, g.Rig, g.Rows, g.Covered[j], g.Trials, j, least, c.Cover)
		}
	}
}

// leastOf is the least count out of n that a probability p falls short of with more than chance.
func leastOf(n int, p float64) int {
	if p == 0 {
		return 0
	}
	b := distuv.Binomial{N: float64(n), P: p}
	k := 0
	for b.CDF(float64(k)) <= chance {
		k++
	}
	return k
}

// Grade is how a method did on one kind of rig, over Trials records of Rows rows, for each number that the rig's poles are
// graded by: the lower coefficients of each of its Factors, which are real poles in the plane of δ = z - 1, or product and
// minus the sum of a pair.
type Grade struct {
	Method       string
	Rig          string
	Rows, Trials int
	Lost         []int     // records in which the method found no such factor or gave up
	RMS          []float64 // root mean square error, the lost records apart
	Ratio        []float64 // the same with each error over its Cramér-Rao bound, of the continuous-time structure
	Free         []float64 // and with all sampled coefficients free
	Covered      []int     // records in which the method's own 95 % interval holds the truth
	Err          error     // the first for which the method gave up
}

// Run lets every method estimate the rig's poles from the same records, record k being the rig's trial k of seed. The
// structure is given; what all methods get as found is the prediction-error fit from the truth, as they would have it in
// an identification that chose the right structure.
func Run(rig fittest.Rig, methods []fit.Estimator, rows, trials int, seed uint64) ([]Grade, error) {
	grades := make([]Grade, len(methods))
	truth, factors := Found(rig), rig.Factors()
	numbers := 0
	for _, f := range factors {
		numbers += len(f) - 1
	}
	for i, m := range methods {
		grades[i] = Grade{Method: m.Name(), Rig: rig.Name, Rows: rows, Trials: trials, Lost: make([]int, numbers),
			RMS: make([]float64, numbers), Ratio: make([]float64, numbers), Free: make([]float64, numbers), Covered: make([]int, numbers)}
	}
	for k := range trials {
		u, y, dither := rig.RecordWithDither(rows, seed, uint64(k))
		recs := []fit.Record{{U: u, Y: y}}
		p, err := fit.NewPredictor(recs, rig.Period, rig.Plant.Delay+2*rig.Period)
		if err != nil {
			return nil, err
		}
		found, err := p.Fit(truth, 1e-9, 60)
		if err != nil {
			return nil, fmt.Errorf("%s, trial %d: %w", rig.Name, k, err)
		}
		bound, free := Bound(rig, u, y, false), Bound(rig, u, y, true)
		for i, m := range methods {
			e, err := m.Estimate(recs, [][][]float64{{dither}}, found)
			if err != nil && grades[i].Err == nil {
				grades[i].Err = err
			}
			grades[i].add(e, factors, bound, free)
		}
	}
	for i := range grades {
		g := &grades[i]
		for j, lost := range g.Lost {
			for _, v := range [][]float64{g.RMS, g.Ratio, g.Free} {
				v[j] = math.Sqrt(v[j] / float64(trials-lost))
			}
		}
	}
	return grades, nil
}

// add counts one estimate, nil where there is none.
func (g *Grade) add(e *fit.PoleEstimate, factors []lti.Poly, bound, free *fit.PoleEstimate) {
	j := 0
	for _, f := range factors {
		var q lti.Poly
		var cov *mat.SymDense
		ok := false
		if e != nil {
			q, cov, ok = e.Factor(f)
		}
		_, least, _ := bound.Factor(f)
		_, own, _ := free.Factor(f)
		for i := range len(f) - 1 {
			if !ok {
				g.Lost[j]++
			} else {
				d := (q[i] - f[i]) * (q[i] - f[i])
				g.RMS[j] += d
				g.Ratio[j] += d / least.At(i, i)
				g.Free[j] += d / own.At(i, i)
				if d <= z95*z95*cov.At(i, i) {
					g.Covered[j]++
				}
			}
			j++
		}
	}
}

// z95 is the two-sided quantile of the normal distribution for confidence.
const (
	confidence = 0.95
	z95        = 1.959963984540054
)

// String is the grade as a line of a table.
func (g Grade) String() string {
	line := fmt.Sprintf("%-10s  %-25s  %6d rows", g.Method, g.Rig, g.Rows)
	for j := range g.Ratio {
		line += fmt.Sprintf("  %5.2f (%4.2f) %3d/%d", g.Ratio[j], g.Free[j], g.Covered[j], g.Trials)
		if g.Lost[j] > 0 {
			line += fmt.Sprintf(" lost %d", g.Lost[j])
		}
	}
	if g.Err != nil {
		line += ": " + g.Err.Error()
	}
	return line
}
