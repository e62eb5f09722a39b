package fit

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Explained says how much of a signal y others explain linearly, at each frequency.
type Explained struct {
	Omega     []float64 // rad/s, from 0 to the Nyquist frequency
	Total     []float64 // spectral density of y, one-sided, in its unit squared per Hz
	Coherence []float64 // multiple coherence as estimated, between 0 and 1: too large by (1 - coherence) Inputs/Segments
	Inputs    int       // signals that explain
	Segments  float64   // that would average as well without overlap
}

// Explain estimates the multiple coherence of y with the signals x, the ordinary one where x is one signal, from the spectra of
// Welch. x[j] and y hold one slice for each record; length is that of the segments, 0: Welch's. A signal that others before it
// give away adds nothing. The error is Welch's.
//
// Each signal of x in turn is taken out of all that follow, Φ_jk - Φ_ji Φ_ik/Φ_ii (Bendat & Piersol, Random Data, 4th ed. 2010,
// section 7.3.1): what is left of the density of y is what no x explains, and 1 less its share is the coherence.
func Explain(x [][][]float64, y [][]float64, period float64, length int) (*Explained, error) {
	const givenAway = 1e-10 // share of a signal's density left, below which it is rounding
	all := append(slices.Clone(x), y)
	n := len(all)
	spectra := make([][]*Spectra, n) // of signals i and j > i
	for i := range all[:n-1] {
		spectra[i] = make([]*Spectra, n)
		for j := i + 1; j < n; j++ {
			s, err := Welch(all[i], all[j], period, length)
			if err != nil {
				return nil, err
			}
			spectra[i][j] = s
		}
	}
	of := spectra[0][n-1]
	e := &Explained{Omega: of.Omega, Total: of.YY, Coherence: make([]float64, len(of.Omega)), Inputs: n - 1, Segments: of.EffectiveSegments()}
	m := make([][]complex128, n)
	for i := range m {
		m[i] = make([]complex128, n)
	}
	for k := range e.Omega {
		m[n-1][n-1] = complex(of.YY[k], 0)
		for i := range n - 1 {
			m[i][i] = complex(spectra[i][n-1].XX[k], 0)
			for j := i + 1; j < n; j++ {
				m[i][j] = spectra[i][j].XY[k]
			}
		}
		for i := range n - 1 {
			if !(real(m[i][i]) > givenAway*spectra[i][n-1].XX[k]) {
				continue
			}
			for j := i + 1; j < n; j++ {
				by := complex(real(m[i][j]), -imag(m[i][j])) / m[i][i]
				for l := j; l < n; l++ {
					m[j][l] -= by * m[i][l]
				}
			}
		}
		if of.YY[k] > 0 {
			e.Coherence[k] = min(max(1-real(m[n-1][n-1])/of.YY[k], 0), 1)
		}
	}
	return e, nil
}

// ExplainedBand is what Explained comes to in a band of frequencies.
type ExplainedBand struct {
	Total, Noise float64 // power of y, and of what is not explained of it, in its unit squared
	Coherence    float64 // share of the power that is explained, without bias: of none it scatters about 0
	SD           float64 // its standard deviation
	ByChance     float64 // which signals that have nothing to do with y exceed with a probability of 1 - level
	Freedom      float64 // independent complex values averaged
}

// Between sums over the frequencies from <= ω < to, rad/s, but those of constants and of Nyquist; level lies in (0, 1). ok is false
// where no frequency lies there, y has no power, or too few segments were averaged.
//
// The densities of n segments are complex Wishart, so that what q unrelated signals explain of that of y and what they leave are
// independent and as chi-squares of 2q and of 2(n-q) degrees (Goodman, Ann. Math. Stat. 34 (1963) 152-177; for q = 1 Carter,
// Knapp & Nuttall 1973, cited at CoherenceThreshold): a coherence by chance is of the distribution Beta(q, n-q), and n/(n-q)
// times what is left is without bias. Over a band of as good as m frequencies that is Beta(mq, m(n-q)). A coherence c scatters by
// 2 c (1-c)² over the number of values averaged (Bendat & Piersol, section 9.2.3), to which what it has by chance is added.
// Segments shorter than what the signals remember make a coherence near 1 smaller than it is.
func (e *Explained) Between(from, to, level float64) (b ExplainedBand, ok bool) {
	n, q := e.Segments, float64(e.Inputs)
	first, last := 1, len(e.Omega)-1
	for first < last && e.Omega[first] < from {
		first++
	}
	for last > first && e.Omega[last-1] >= to {
		last--
	}
	if first >= last || n < q+1 {
		return b, false
	}
	// Under a Hann window the values of neighbours correlate by 2/3 and those of the next but one by 1/6, products of two signals by
	// the squares of that, and what is explained by chance, the square of such a product, by their squares again.
	step := e.Omega[1] / (2 * math.Pi)
	power := func(k int) float64 {
		if k < last {
			return step * e.Total[k]
		}
		return 0
	}
	var products, squares float64
	for k := first; k < last; k++ {
		p, near, far := power(k), power(k+1), power(k+2)
		b.Total += p
		b.Noise += p * (1 - e.Coherence[k]) * n / (n - q)
		products += p * (p + 2*4./9*near + 2./36*far)
		squares += p * (p + 2*16./81*near + 2./1296*far)
	}
	if !(b.Total > 0) {
		return b, false
	}
	b.Freedom = n * b.Total * b.Total / products
	b.Coherence = 1 - b.Noise/b.Total
	m := b.Total * b.Total / squares
	chance := distuv.Beta{Alpha: m * q, Beta: m * (n - q)}
	b.ByChance = 1 - (1-chance.Quantile(level))*n/(n-q)
	b.SD = (1 - b.Coherence) * math.Sqrt(2*max(b.Coherence, 0)/b.Freedom+chance.Variance()*n*n/((n-q)*(n-q)))
	return b, true
}

// SegmentLength is the greatest power of two up to most of which records of the lengths of x give so many half-overlapping
// segments; 0 where not even one of 8 does.
func SegmentLength(x [][]float64, count, most int) int {
	length := 0
	for next := 8; next <= most && segments(x, next) >= count; next *= 2 {
		length = next
	}
	return length
}
