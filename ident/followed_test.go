package ident

import (
	"math"
	"slices"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// The joint covariance of what is followed against differences of the plant's coefficients: a real pole, a pair,
// and a gain below zero.
func TestFollowedCovariance(t *testing.T) {
	for _, c := range []struct {
		name  string
		num   []float64 // descending
		roots []complex128
		want  []string
	}{
		{"real pole", []float64{2, 30}, []complex128{3, -7, -20}, []string{"pole_re", "log_gain V/A -", "log_lead 2 V/A"}},
		{"pair", []float64{-5}, []complex128{1 + 6i, 1 - 6i}, []string{"pole_re", "pole_im", "log_gain V/A -", "log_lead 2 V/A -"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			den := lti.FromRoots(c.roots)
			nz, n := len(c.num), len(den)-1
			p := nz + n
			m := Model{Plant: Plant{Numerator: c.num, Denominator: reversed(den), Parameters: parameterNames(nz-1, n)}}
			size := make([]float64, p)
			for i := range size {
				size[i] = 1e-3 * math.Abs(*parameterOf(&m, i))
			}
			for i := range p {
				row := make([]float64, p)
				for j := range p {
					row[j] = size[i] * size[j] * math.Pow(-0.6, math.Abs(float64(i-j)))
				}
				m.Plant.Covariance = append(m.Plant.Covariance, row)
			}
			m.derive()
			f := m.Followed(data.Units{Input: "A", Output: "V"})
			if f == nil || !slices.Equal(f.Names, c.want) {
				t.Fatalf("followed: %+v, want %q", f, c.want)
			}
			slope := make([][]float64, len(f.Values))
			for i := range p {
				var at [2]*Followed
				for side, sign := range []float64{-1, 1} {
					moved := m
					moved.Plant.Numerator, moved.Plant.Denominator = slices.Clone(c.num), slices.Clone(m.Plant.Denominator)
					*parameterOf(&moved, i) += sign * 1e-3 * size[i]
					moved.derive()
					at[side] = moved.Followed(data.Units{Input: "A", Output: "V"})
				}
				for k := range slope {
					slope[k] = append(slope[k], (at[1].Values[k]-at[0].Values[k])/(2e-3*size[i]))
				}
			}
			for k, a := range slope {
				for l, b := range slope {
					var want float64
					for i := range p {
						for j := range p {
							want += a[i] * m.Plant.Covariance[i][j] * b[j]
						}
					}
					// Differences of roots lose half of the digits.
					scale := math.Sqrt(f.Covariance[k][k] * f.Covariance[l][l])
					if d := math.Abs(f.Covariance[k][l] - want); !(d < 1e-5*scale) {
						t.Errorf("covariance of %s and %s is %g, by differences %g", f.Names[k], f.Names[l], f.Covariance[k][l], want)
					}
				}
			}
		})
	}
}

// parameterOf points at coefficient i of b_0 …, a_1 … in the order of Plant.Parameters.
func parameterOf(m *Model, i int) *float64 {
	nz := len(m.Plant.Numerator)
	if i < nz {
		return &m.Plant.Numerator[nz-1-i]
	}
	return &m.Plant.Denominator[i-nz+1]
}

// What has no normal approximation is not followed.
func TestFollowedLeavesOut(t *testing.T) {
	of := func(num []float64, roots ...complex128) *Followed {
		den := lti.FromRoots(roots)
		p := len(num) + len(den) - 1
		m := Model{Plant: Plant{Numerator: num, Denominator: reversed(den), Parameters: parameterNames(len(num)-1, len(den)-1)}}
		for i := range p {
			m.Plant.Covariance = append(m.Plant.Covariance, make([]float64, p))
			m.Plant.Covariance[i][i] = 0.04
		}
		m.derive()
		return m.Followed(data.Units{})
	}
	for _, c := range []struct {
		name string
		got  *Followed
		want []string
	}{
		{"two poles that may have met", of([]float64{9}, 3, 3.1), []string{"log_gain", "log_lead 2"}},
		{"a gain that may be zero", of([]float64{0.1}, 3, -8), []string{"pole_re"}},
		{"an integrator", of([]float64{5}, 0, -8), []string{"log_lead 2"}},
	} {
		if c.got == nil || !slices.Equal(c.got.Names, c.want) {
			t.Errorf("%s: followed %+v, want %q", c.name, c.got, c.want)
		}
	}
	if got := new(Model).Followed(data.Units{}); got != nil {
		t.Errorf("a model without a plant: followed %+v", got)
	}
}

// What most plants have is compared, the pole and the steady gain where there is a choice.
func TestFollowedNames(t *testing.T) {
	of := func(names ...string) *Followed { return &Followed{Names: names} }
	all, lead := of("pole_re", "log_gain -", "log_lead 2"), of("pole_re", "log_lead 2")
	pair, gain := of("pole_re", "pole_im", "log_gain"), of("log_lead 2")
	for _, c := range []struct {
		name string
		list []*Followed
		want []string
	}{
		{"all alike", []*Followed{all, all}, []string{"pole_re", "log_gain -"}},
		{"one without a steady gain", []*Followed{all, lead, all}, []string{"pole_re", "log_lead 2"}},
		{"pairs", []*Followed{pair, pair, pair, all}, []string{"pole_re", "pole_im", "log_gain"}},
		{"a pair among real poles", []*Followed{all, all, all, pair}, []string{"pole_re", "log_gain -"}},
		{"poles seldom", []*Followed{gain, gain, lead}, []string{"log_lead 2"}},
		{"half of each", []*Followed{pair, all}, []string{"pole_re"}},
		{"nothing", nil, nil},
	} {
		if got := FollowedNames(c.list); !slices.Equal(got, c.want) {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}
