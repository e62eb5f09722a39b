package fit

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/dsp/fourier"
)

// Spectra are the power and cross spectral densities of two signals x and y, one-sided, in units squared per Hz.
type Spectra struct {
	Omega    []float64 // rad/s, from 0 to the Nyquist frequency
	XX, YY   []float64
	XY       []complex128 // conj(X) Y: the phase is that by which y leads x
	Segments int          // averaged
}

// SpectrumSegments is about how many half-overlapping segments Welch averages by default.
const SpectrumSegments = 16

// Welch averages the spectra of half-overlapping segments of length samples, their means removed, under a periodic Hann
// window; the segments of all records count alike. length 0 is the greatest power of two that gives SpectrumSegments
// segments. x and y hold one slice for each record. Welch, The use of fast Fourier transform for the estimation of power
// spectra, IEEE Trans. Audio Electroacoustics 15 (1967) 70-73.
//
// In closed loop XY/XX with x the input and y the output is not the plant but a blend of it and of minus the inverse of
// the controller. With r from outside the loop, the ratio of XY of (r, y) to XY of (r, u) is the plant.
func Welch(x, y [][]float64, period float64, length int) (*Spectra, error) {
	if len(x) != len(y) {
		panic(badRecord)
	}
	if period <= 0 || length < 0 {
		panic("fit: period not positive or length negative")
	}
	longest := 0
	for i := range x {
		if len(x[i]) != len(y[i]) {
			panic(badRecord)
		}
		longest = max(longest, len(x[i]))
	}
	if length == 0 {
		for length = 8; segments(x, 2*length) >= SpectrumSegments; {
			length *= 2
		}
	}
	if length > longest {
		return nil, fmt.Errorf("spectrum: segments of %d samples are longer than the longest record, %d", length, longest)
	}
	if length < 4 {
		return nil, fmt.Errorf("spectrum: segments of %d samples are too short, 4 are needed", length)
	}
	bins := length/2 + 1
	s := &Spectra{Omega: make([]float64, bins), XX: make([]float64, bins), YY: make([]float64, bins), XY: make([]complex128, bins)}
	window, power := make([]float64, length), 0.0
	for i := range window {
		w := 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(length))
		window[i] = w
		power += w * w
	}
	fft := fourier.NewFFT(length)
	work := make([]float64, length)
	transform := func(dst []complex128, v []float64) {
		m := mean(v)
		for i, w := range window {
			work[i] = (v[i] - m) * w
		}
		fft.Coefficients(dst, work)
	}
	fx, fy := make([]complex128, bins), make([]complex128, bins)
	for i := range x {
		for from := 0; from+length <= len(x[i]); from += length / 2 {
			transform(fx, x[i][from:from+length])
			transform(fy, y[i][from:from+length])
			s.Segments++
			for k, a := range fx {
				b := fy[k]
				s.XX[k] += real(a)*real(a) + imag(a)*imag(a)
				s.YY[k] += real(b)*real(b) + imag(b)*imag(b)
				s.XY[k] += complex(real(a), -imag(a)) * b
			}
		}
	}
	for k := range s.Omega {
		s.Omega[k] = 2 * math.Pi * float64(k) / (float64(length) * period)
		scale := 2 * period / (power * float64(s.Segments))
		if k == 0 || 2*k == length {
			scale /= 2
		}
		s.XX[k] *= scale
		s.YY[k] *= scale
		s.XY[k] *= complex(scale, 0)
	}
	return s, nil
}

func segments(x [][]float64, length int) int {
	n := 0
	for _, v := range x {
		if len(v) >= length {
			n += (len(v)-length)/(length/2) + 1
		}
	}
	return n
}

// Coherence returns |XY|^2 / (XX YY), between 0 and 1; 0 where a signal has no power.
func (s *Spectra) Coherence() []float64 {
	c := make([]float64, len(s.XX))
	for k := range c {
		if d := s.XX[k] * s.YY[k]; d > 0 {
			a := s.XY[k]
			c[k] = (real(a)*real(a) + imag(a)*imag(a)) / d
		}
	}
	return c
}

// EffectiveSegments is how many segments without overlap would average as well: for half-overlapping Hann segments
// K / (1 + (K-1)/(18 K)) (Welch 1967, with the window's correlation 1/6).
func (s *Spectra) EffectiveSegments() float64 {
	k := float64(s.Segments)
	return k / (1 + (k-1)/(18*k))
}

// CoherenceThreshold is the coherence that the average over n independent segments of unrelated signals exceeds with
// probability 1 - level: 1 - (1-level)^(1/(n-1)); 1 for n <= 1. Carter, Knapp & Nuttall, Estimation of the
// magnitude-squared coherence function via overlapped fast Fourier transform processing, IEEE Trans. Audio
// Electroacoustics 21 (1973) 337-344.
func CoherenceThreshold(n, level float64) float64 {
	if n <= 1 {
		return 1
	}
	return 1 - math.Pow(1-level, 1/(n-1))
}
