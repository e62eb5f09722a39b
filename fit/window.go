package fit

// filtered holds the signals that derivatives of the errors are made of, row by
// row as the data.
type filtered struct {
	yf, uf []float64 // D y / C, D u / C
	vf, ef []float64 // (A y - B u) / C, e / C
}

func (f *filtered) parts() []*[]float64 { return []*[]float64{&f.yf, &f.uf, &f.vf, &f.ef} }

// window shows the filtered signals of a record a chunk at a time, rows [from, to):
// so a long record needs no room for them, and a short one that of the nearest
// cache.
type window struct {
	filtered
	from, to int
	buf      []float64
}

// rest puts the window before the first row of a record.
func (s *search) rest() {
	v := &s.view
	size := s.pad + chunk
	for _, x := range append(v.parts(), &v.buf) {
		if len(*x) != size {
			*x = make([]float64, size)
		}
		clear(*x)
	}
	v.from, v.to = 0, s.pad
}

// advance moves the window on by at most a chunk, to end before row to. What
// derivatives look back on stays in it. t0 is the row of the first equation.
func (s *search) advance(w *workspace, q shifted, t0, to int) {
	v := &s.view
	from := v.to
	for _, x := range v.parts() {
		copy(*x, (*x)[from-s.pad-v.from:from-v.from])
	}
	v.from, v.to = from-s.pad, to
	s.through(v.yf, w.y, q, from, to)
	s.through(v.uf, w.u, q, from, to) // no more where the delay is negative: an input acts from the next row on
	if len(q.d) > 1 {
		at := v.still(v.vf, from, to, s.pad+len(q.a)+len(q.b)+max(q.whole, 0))
		fir(v.buf[at-v.from:to-v.from], w.y, q.a, at, 1, false)
		fir(v.buf[at-v.from:to-v.from], w.u, q.b, at-q.whole, -1, true)
		divide(v.vf[:to-v.from], v.buf[:to-v.from], q.c, at-v.from)
	}
	at := v.still(v.ef, from, to, t0-(len(q.c)-1))
	copy(v.buf[at-v.from:], w.e[at:to])
	divide(v.ef[:to-v.from], v.buf[:to-v.from], q.c, at-v.from)
}

// through passes rows [from, to) of x through D/C; the first rows, which lack
// their past, count as none.
func (s *search) through(dst, x []float64, q shifted, from, to int) {
	v := &s.view
	fir(v.buf[from-v.from:to-v.from], x, q.d, from, 1, false)
	v.still(v.buf, from, to, s.pad+len(q.d)-1)
	divide(dst[:to-v.from], v.buf[:to-v.from], q.c, from-v.from)
}

// still clears those rows of [from, to) that are before row start, and returns
// the first other one.
func (v *window) still(x []float64, from, to, start int) int {
	at := max(from, min(start, to))
	clear(x[from-v.from : at-v.from])
	return at
}

// filterAll fills the filtered signals of all rows of a record from its errors.
func (s *search) filterAll(w *workspace, q shifted, t0 int) {
	if len(w.yf) == 0 {
		for _, x := range w.parts() {
			*x = make([]float64, len(w.e))
		}
	}
	s.rest()
	v := &s.view
	for v.to < len(w.e) {
		from := v.to
		s.advance(w, q, t0, min(len(w.e), from+chunk))
		for i, x := range w.parts() {
			copy((*x)[from:v.to], (*v.parts()[i])[from-v.from:])
		}
	}
}
