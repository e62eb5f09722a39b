package fit

import (
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Outliers weighs prediction errors for what wrong outputs leave in them. An
// output that is off by w in one row leaves w times the response of A D/C to a
// pulse, from that row on; an error of the rig itself, however large, a single
// pulse (Fox, Outliers in time series, J. R. Statist. Soc. B 34 (1972) 350-363;
// Chang, Tiao & Chen, Estimation of time series parameters in the presence of
// outliers, Technometrics 30 (1988) 193-204). Records and rows are those given;
// a record too short for the fit has no errors.
type Outliers struct {
	// SD is the deviation of each log's errors by their median modulus, which a
	// few large ones do not move; output units.
	SD []float64
	// Memory is how many rows hold all but a hundredth of the response's energy.
	Memory int

	first  []int
	log    []int
	errs   [][]float64
	along  [][]float64 // products of errors and responses, by the response's row
	echo   []float64
	energy []float64 // of the first rows of echo
}

// Outliers returns the tests of m's prediction errors. Outputs missing already
// are allowed for in the errors, not in the deviations of the tests: next to
// them these err on the small side.
func (p *Predictor) Outliers(m *Prediction) (*Outliers, error) {
	s, x := p.begin(m)
	defer s.done()
	_, q, ok := s.errorsAt(x)
	if !ok {
		return nil, s.failure()
	}
	ad := lti.Poly(q.a).Mul(q.d)
	n := len(p.given)
	o := &Outliers{SD: make([]float64, len(p.logs)), log: make([]int, n), first: make([]int, n), errs: make([][]float64, n), along: make([][]float64, n)}
	byLog := make([][][]float64, len(p.logs))
	longest := 0
	for i := range s.work {
		e := append([]float64(nil), s.work[i].e[s.start(i):]...)
		floats.Scale(s.sy, e)
		o.first[p.of[i]], o.errs[p.of[i]], o.along[p.of[i]] = p.first[i], e, backwards(e, ad, q.c)
		log := p.recs[i].Log
		o.log[p.of[i]] = log
		byLog[log] = append(byLog[log], e)
		longest = max(longest, len(e))
	}
	for log, x := range byLog {
		if len(x) > 0 {
			o.SD[log] = medianModulus(x) / 0.674490 // that of a standard normal variable
		}
	}
	o.echo = echoOf(ad, q.c, min(longest, longestEcho))
	o.energy = make([]float64, len(o.echo)+1)
	for k, v := range o.echo {
		o.energy[k+1] = o.energy[k] + v*v
	}
	total := o.energy[len(o.energy)-1]
	for o.energy[o.Memory] < 0.99*total {
		o.Memory++
	}
	return o, nil
}

// medianModulus returns the median modulus of numbers, of an even count the upper
// one, without sorting them or a copy: the bits of moduli sort as they do, and
// those of the median are found by counting, sixteen at a time.
func medianModulus(x [][]float64) float64 {
	const digit = 16
	place := 0
	for _, part := range x {
		place += len(part)
	}
	place /= 2
	count := make([]int, 1<<digit)
	var bits uint64
	for shift := 64 - digit; shift >= 0; shift -= digit {
		clear(count)
		for _, part := range x {
			for _, v := range part {
				if b := math.Float64bits(math.Abs(v)) >> shift; b>>digit == bits {
					count[b&(1<<digit-1)]++
				}
			}
		}
		d := 0
		for ; place >= count[d]; d++ {
			place -= count[d]
		}
		bits = bits<<digit | uint64(d)
	}
	return math.Float64frombits(bits)
}

// backwards returns the products of e with the responses of A D/C to a pulse in
// each of its rows: e through the same filter against the time.
func backwards(e, ad, c []float64) []float64 {
	out := make([]float64, len(e))
	z := make([]float64, chunk+max(len(ad), len(c))) // e/C from a row on; none behind the last
	for to := len(e); to > 0; {
		from := max(0, to-chunk)
		copy(z[to-from:], z) // rows of the turn before
		for k := to - 1; k >= from; k-- {
			at := z[k-from:]
			v := e[k]
			for j := 1; j < len(c); j++ {
				v -= c[j] * at[j]
			}
			at[0] = v
			for j, a := range ad {
				out[k] += a * at[j]
			}
		}
		to = from
	}
	return out
}

// Records returns how many records there are, Rows which rows [from, to) of one
// have errors.
func (o *Outliers) Records() int { return len(o.errs) }

func (o *Outliers) Rows(record int) (from, to int) {
	return o.first[record], o.first[record] + len(o.errs[record])
}

// Single returns, in standard deviations, by how much the output of one row is
// off if it alone is wrong, and how large its error is if all outputs are right.
// Where the rig runs on alone both have standard normal distributions.
func (o *Outliers) Single(record, row int) (wrong, large float64) {
	k := row - o.first[record]
	e, sd := o.errs[record], o.SD[o.log[record]]
	length := min(len(o.echo), len(e)-k)
	return o.along[record][k] / (sd * math.Sqrt(o.energy[length])), e[k] / sd
}

// Stretch returns by how much the outputs of rows [from, to) explain the errors
// better if they are taken for wrong: of chi-square distribution with to-from
// degrees of freedom where they are right.
func (o *Outliers) Stretch(record, from, to int) float64 {
	n, rows := to-from, len(o.errs[record])
	at := from - o.first[record]
	h, g := mat.NewSymDense(n, nil), make([]float64, n)
	for i := range n {
		g[i] = o.along[record][at+i]
		for j := i; j < n && j-i < len(o.echo); j++ {
			m := min(len(o.echo)-(j-i), rows-at-j)
			h.SetSym(i, j, floats.Dot(o.echo[:m], o.echo[j-i:j-i+m]))
		}
	}
	x := make([]float64, n)
	if !solveScaled(x, h, g, 0) {
		return 0
	}
	sd := o.SD[o.log[record]]
	return floats.Dot(x, g) / (sd * sd)
}
