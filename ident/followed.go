package ident

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/data"
)

// Followed are the numbers of a plant that are followed from log to log, with their joint covariance: the rightmost
// pole, which any structure has, and the gain. Names: "pole_re" and, of a pair, "pole_im" (> 0), rad/s; "log_gain", the
// logarithm of the steady gain's modulus, and "log_lead K", that of the leading coefficient of the numerator of a plant
// with K poles more than zeros, either followed by the unit and by "-" where the gain is negative. A number whose
// normal approximation does not hold is missing: a pole that may have met another, an integrator that was chosen, a
// gain that may be zero.
type Followed struct {
	Names      []string    `json:"names"`
	Values     []float64   `json:"values"`
	Covariance [][]float64 `json:"covariance"`
}

// clearOfZero is how many deviations a gain is from zero at least for its logarithm to be normal.
const clearOfZero = 3

// Followed returns what is followed of a plant; nil where there is nothing. Its deviations are those of the 95 %
// intervals, its correlations those of the plant's covariance.
func (m *Model) Followed(u data.Units) *Followed {
	nz, n := len(m.Plant.Numerator), len(m.Plant.Denominator)-1
	if n < 1 || len(m.Plant.Covariance) < nz+n || len(m.Poles) == 0 {
		return nil
	}
	f := new(Followed)
	var sd []float64
	var gradients [][]float64 // by b_0 …, a_1 …, as Plant.Parameters has them
	add := func(name string, value, deviation float64, gradient []float64) {
		if deviation > 0 && !math.IsInf(deviation, 0) {
			f.Names, f.Values = append(f.Names, name), append(f.Values, value)
			sd, gradients = append(sd, deviation), append(gradients, gradient)
		}
	}
	deviation := func(iv Interval) float64 { return (iv.Hi - iv.Lo) / (2 * z95) }

	den := m.denominator()
	pole := slices.MaxFunc(m.Poles, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
	r := complex(pole.Re, pole.Im)
	clear := r != 0
	for _, other := range m.Poles {
		if b := complex(other.Re, other.Im); b != r && pairs(r, b) && den.meeting(r, b) < apart {
			clear = false
		}
	}
	if clear {
		re, im := den.gradient(r)
		// a_k multiplies s^(n-k).
		slices.Reverse(re)
		slices.Reverse(im)
		fill := make([]float64, nz)
		add("pole_re", pole.Re, deviation(pole.Re95), slices.Concat(fill, re[1:]))
		if pole.Im != 0 {
			add("pole_im", pole.Im, deviation(pole.Im95), slices.Concat(fill, im[1:]))
		}
	}
	gain := func(name string, e *Estimate, gradient []float64) {
		if e == nil || !(math.Abs(e.Value) > clearOfZero*deviation(e.Interval95)) {
			return
		}
		if u.Output != "" || u.Input != "" {
			name += fmt.Sprintf(" %s/%s", u.Output, u.Input)
		}
		if e.Value < 0 {
			name += " -"
		}
		add(name, math.Log(math.Abs(e.Value)), deviation(e.Interval95)/math.Abs(e.Value), gradient)
	}
	steady, leading := make([]float64, nz+n), make([]float64, nz+n)
	steady[0], steady[nz+n-1] = 1/m.Plant.Numerator[nz-1], -1/m.Plant.Denominator[n]
	leading[nz-1] = 1 / m.Plant.Numerator[0]
	gain("log_gain", m.Gain.DC, steady)
	gain(fmt.Sprintf("log_lead %d", n+1-nz), m.Gain.HighFrequency, leading)
	if len(f.Names) == 0 {
		return nil
	}
	across := func(a, b []float64) float64 {
		var v float64
		for i := range a {
			for j := range b {
				v += a[i] * m.Plant.Covariance[i][j] * b[j]
			}
		}
		return v
	}
	for i, a := range gradients {
		row := make([]float64, len(sd))
		for j, b := range gradients {
			row[j] = sd[i] * sd[j]
			if both := across(a, a) * across(b, b); i != j && both > 0 {
				row[j] *= across(a, b) / math.Sqrt(both)
			}
		}
		f.Covariance = append(f.Covariance, row)
	}
	return f
}

// enough is the share of plants that must have all of what is followed.
const enough = 2.0 / 3

// FollowedNames chooses what plants are compared by: the rightmost pole and one gain, if at least two in three plants
// have them, else what most of them have. It looks at names alone, not at values. Of two gains that are there as often
// the steady one is taken.
func FollowedNames(list []*Followed) []string {
	gain, times := "", make(map[string]int)
	for _, f := range list {
		for _, name := range f.Names {
			times[name]++
		}
	}
	for _, f := range list {
		for _, name := range f.Names {
			if strings.HasPrefix(name, "log_") && times[name] > times[gain] {
				gain = name
			}
		}
	}
	var best []string
	most := 0
	for _, names := range [][]string{{"pole_re", "pole_im", gain}, {"pole_re", gain}, {gain}, {"pole_re", "pole_im"}, {"pole_re"}} {
		n := 0
		for _, f := range list {
			if !slices.ContainsFunc(names, func(name string) bool { return !slices.Contains(f.Names, name) }) {
				n++
			}
		}
		if n > most {
			best, most = names, n
		}
		if float64(n) >= enough*float64(len(list)) {
			break
		}
	}
	return best
}

// Pick returns the values of names and their covariance; nil where one of them is missing.
func (f *Followed) Pick(names []string) *Followed {
	p := &Followed{Names: names}
	var at []int
	for _, name := range names {
		i := slices.Index(f.Names, name)
		if i < 0 {
			return nil
		}
		at = append(at, i)
		p.Values = append(p.Values, f.Values[i])
	}
	for _, i := range at {
		var row []float64
		for _, j := range at {
			row = append(row, f.Covariance[i][j])
		}
		p.Covariance = append(p.Covariance, row)
	}
	return p
}
