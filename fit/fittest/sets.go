package fittest

// Set is one of the deterministic data sets: integers made by a fixed generator, so that results computed elsewhere in
// exact arithmetic hold for it to the last digit. R is nil where the loop is open.
type Set struct {
	Name    string
	U, Y, R []float64
}

// generator is the 32-bit linear congruential generator with Knuth's multiplier 1664525 and increment 1013904223
// (The Art of Computer Programming 2, 3rd ed. 1997, section 3.3.4, table 1), stepped before use.
type generator uint32

func (g *generator) next() uint32 {
	*g = *g*1664525 + 1013904223
	return uint32(*g)
}

// bit is +1 or -1.
func (g *generator) bit() int64 {
	if g.next() >= 1<<31 {
		return 1
	}
	return -1
}

// noise is an odd integer in -511 ... 511, of mean 0 and variance (512^2-1)/3.
func (g *generator) noise() int64 { return 2*int64(g.next()>>23) - 511 }

// NoiseVariance is that of the noise of all sets but D5, which has four times as much.
const NoiseVariance = (512*512 - 1) / 3.0

// run steps n samples: law gives the input from the excitation and the output of the same sample.
func run(name string, seed uint32, n int, closed bool, sample func(r, e int64) (u, y int64)) Set {
	g := generator(seed)
	s := Set{Name: name, U: make([]float64, n), Y: make([]float64, n)}
	if closed {
		s.R = make([]float64, n)
	}
	for t := range n {
		r := g.bit()
		e := g.noise()
		u, y := sample(r, e)
		s.U[t], s.Y[t] = float64(u), float64(y)
		if closed {
			s.R[t] = float64(r)
		}
	}
	return s
}

// D1 is y = 1.5 y1 - 0.6875 y2 + u1 + 0.5 u2 + e, open loop; 1000 samples. Right shifts round, here and below.
func D1() Set {
	var y1, y2, u1, u2 int64
	return run("D1", 12345, 1000, false, func(r, e int64) (u, y int64) {
		u = 1024 * r
		y = (24*y1-11*y2+16*u1+8*u2+8)>>4 + e
		y1, y2, u1, u2 = y, y1, u, u1
		return u, y
	})
}

// D2 is y = 1.25 y1 + 0.5 u1 + e with u = r - 2 y, r = +-512: an unstable plant in closed loop; 2000 samples.
func D2() Set { return d2("D2", 512) }

// D2z is D2 with r = 0: nothing from outside the loop.
func D2z() Set { return d2("D2z", 0) }

func d2(name string, amplitude int64) Set {
	var y1, u1 int64
	s := run(name, 2024, 2000, true, func(r, e int64) (u, y int64) {
		y = (5*y1+2*u1+2)>>2 + e
		u = amplitude*r - 2*y
		y1, u1 = y, u
		return u, y
	})
	for i := range s.R {
		s.R[i] *= float64(amplitude)
	}
	return s
}

// D3 is y = 2 y1 - 0.9375 y2 + 0.25 u1 + 0.25 u2 + e with u = r - 2 y + 1.5 y1, r = +-1024: poles 1.25 and 0.75, in
// closed loop; 4000 samples.
func D3() Set {
	var y1, y2, u1, u2 int64
	s := run("D3", 777, 4000, true, func(r, e int64) (u, y int64) {
		y = (32*y1-15*y2+4*u1+4*u2+8)>>4 + e
		u = 1024*r - 2*y + (3*y1)>>1
		y1, y2, u1, u2 = y, y1, u, u1
		return u, y
	})
	for i := range s.R {
		s.R[i] *= 1024
	}
	return s
}

// D4 is w = 0.75 w1 + 0.5 u1, y = w + e, open loop: output error; 1000 samples.
func D4() Set {
	var w, u1 int64
	return run("D4", 31415, 1000, false, func(r, e int64) (u, y int64) {
		u = 1024 * r
		w = (3*w + 2*u1 + 2) >> 2
		u1 = u
		return u, w + e
	})
}

// D5 is y = 1.25 y1 + 0.5 u1 + e + 0.5 e1 with u = r - 2 y, r = +-1024: an unstable ARMAX plant in closed loop; 2000
// samples.
func D5() Set {
	var y1, u1, e1 int64
	s := run("D5", 271828, 2000, true, func(r, e int64) (u, y int64) {
		e *= 2
		y = (5*y1+2*u1+2)>>2 + e + e1/2
		u = 1024*r - 2*y
		y1, u1, e1 = y, u, e
		return u, y
	})
	for i := range s.R {
		s.R[i] *= 1024
	}
	return s
}
