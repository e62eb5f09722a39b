package fittest

import "testing"

// The sums were computed independently, in exact integers, in two other programs.
func TestSetsAreThePublishedOnes(t *testing.T) {
	for _, c := range []struct {
		set                   Set
		y, yy, u, uu, uy, end float64
	}{
		{D1(), 30850, 17329318220, 10240, 1048576000, 16084992, 945},
		{D2(), -17643, 311233689, 20950, 1780103780, -625187634, -54},
		{D3(), 198819, 6721661009, -77345, 11931194523, -4896578670, 1013},
		{D4(), 70878, 692770048, 26624, 1048576000, -4605952, 514},
		{D5(), 51877, 1759726011, -42314, 8759424748, -3425294198, -1730},
	} {
		var y, yy, u, uu, uy float64
		for i, v := range c.set.Y {
			w := c.set.U[i]
			y, yy, u, uu, uy = y+v, yy+v*v, u+w, uu+w*w, uy+v*w
		}
		if end := c.set.Y[len(c.set.Y)-1]; y != c.y || yy != c.yy || u != c.u || uu != c.uu || uy != c.uy || end != c.end {
			t.Errorf("%s: sums %v %v %v %v %v, last %v; want %v %v %v %v %v, %v", c.set.Name, y, yy, u, uu, uy, end,
				c.y, c.yy, c.u, c.uu, c.uy, c.end)
		}
	}
	var yy float64
	for _, v := range D2z().Y {
		yy += v * v
	}
	if yy != 177809408 {
		t.Errorf("D2z: sum y^2 %v, want 177809408", yy)
	}
}

// Knuth's generator from seed 12345: first states.
func TestGenerator(t *testing.T) {
	g := generator(12345)
	for i, want := range []uint32{87628868, 71072467, 2332836374, 2726892157, 3908547000, 483019191} {
		if got := g.next(); got != want {
			t.Errorf("state %d: %d, want %d", i, got, want)
		}
	}
}
