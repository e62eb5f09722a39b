package ident

import (
	"context"
	"fmt"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// knownFit fits a simulated log of a rig in a known structure from a start near the
// truth, which a search would find, too: what a study of many pairs can afford. It
// tests no method and draws no band.
func knownFit(t testing.TB, r demorig.Rig, seed uint64, start *fit.Prediction) *Model {
	t.Helper()
	e := logOf(t, r, seed)
	exps := []*data.Experiment{e}
	rig := &data.Rig{Name: r.Name, OperatingPoint: &data.OperatingPoint{Input: r.U0, Output: r.Y0}}
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, start.Delay))
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(start, finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	m := newModel(exps, rig)
	m.Verdict, m.Noise.SamplePeriod = Sound, period
	ranked := []*candidate{{structure: structure{f.Poles, f.Zeros, f.Shape.Colour, f.FreeDelay, f.Integrators}, fit: f, bic: f.BIC()}}
	if err := m.tests(p, recs, f); err != nil {
		t.Fatal(err)
	}
	if err := m.covariance(p, f); err != nil {
		t.Fatal(err)
	}
	m.describe(p, f, rig)
	m.conditions(p, recs, f, rig)
	if err := m.loosen(p, f, ranked); err != nil {
		t.Fatal(err)
	}
	if err := m.sample(context.Background(), p, f, ranked, Options{Seed: seed, Workers: 1}); err != nil {
		t.Fatal(err)
	}
	m.fitted = &refitted{p: p, f: f, sp: p, some: recs}
	return m
}

// logOf is a simulated log, as reading would give it.
func logOf(t testing.TB, r demorig.Rig, seed uint64) *data.Experiment {
	t.Helper()
	trace, err := r.Simulate(r.Signals(r.Rows, seed))
	if err != nil {
		t.Fatal(err)
	}
	return &data.Experiment{File: fmt.Sprint(r.Name, seed), Period: r.Period, Rows: r.Rows, Used: r.Rows, Segments: []data.Segment{{U: trace.U, Y: trace.Y}}}
}

// start is where knownFit starts for a rig.
func start(t testing.TB, r demorig.Rig) *fit.Prediction {
	f := truth(t, r)
	for f.Integrators < f.Poles && f.Den[f.Integrators] == 0 {
		f.Integrators++
	}
	return f
}

// mostByChance is the count that so many trials of probability p exceed once in 700
// runs: 34 of 400 at 5 %.
func mostByChance(n int, p float64) int {
	k := 0
	for (distuv.Binomial{N: float64(n), P: p}).Survival(float64(k)) > 1.5e-3 {
		k++
	}
	return k
}

// change is what happens to a rig, or to how its log is taken, between two logs.
type change struct {
	name  string
	to    func(r *demorig.Rig)
	moved string // the number that tells how visible it is; empty: the plant does not move
	size  float64
}

var changesOfRigs = []change{
	{"nothing", func(r *demorig.Rig) {}, "", 0},
	{"probe", func(r *demorig.Rig) {
		r.DitherHold, r.StepHold, r.Dither, r.Step = 2*r.DitherHold, 2*r.StepHold, 0.8*r.Dither, 0.8*r.Step
	}, "", 0},
	{"law", func(r *demorig.Rig) { r.Stopgap.Num = r.Stopgap.Num.Scale(1.15) }, "", 0},
	{"gain", func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(1.12) }, "gain", 0.12},
	{"pole", func(r *demorig.Rig) { r.Truth.Den = faster(r.Truth.Den, 1.08) }, "unstable pole", 0.08},
}

// asTold are changes of just the size that the comparison of an unchanged rig told to
// be visible.
func asTold(told []Visible) []change {
	var list []change
	for _, v := range told {
		if v.Size == nil {
			continue
		}
		f := 1 + *v.Size
		to := func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(f) }
		if v.Name != "gain" {
			to = func(r *demorig.Rig) { r.Truth.Den = faster(r.Truth.Den, f) }
		}
		list = append(list, change{v.Name + " as told", to, v.Name, math.Inf(1)})
	}
	return list
}

// faster scales the unstable poles of a denominator by f.
func faster(den lti.Poly, f float64) lti.Poly {
	r := den.Roots()
	for i := range r {
		if real(r[i]) > 0 {
			r[i] *= complex(f, 0)
		}
	}
	return lti.FromRoots(r)
}

// pairsOf sets how many pairs of logs a study has and which rigs it is about, of its
// short form the first so many.
func pairsOf(pairs, rigs int) (int, []demorig.Rig) {
	list := demorig.All()[:rigs]
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		pairs, _ = strconv.Atoi(v)
		list = demorig.All()
	}
	if name := os.Getenv("STEADYRIG_RIG"); name != "" {
		r, _ := demorig.ByName(name)
		list = []demorig.Rig{r}
	}
	if v := os.Getenv("STEADYRIG_ROWS"); v != "" {
		for i := range list {
			list[i].Rows, _ = strconv.Atoi(v)
		}
	}
	return pairs, list
}

// Pairs of logs of rigs that did not move, under the same and another probe and law,
// and of such whose gain or unstable pole did: how often "moved" is called. Where
// nothing moved that is a binomial count at 5 %, for each of the three; where the
// change is as large as what the comparison says it sees in 95 of 100, and where it is
// just that large, the calls are at least the binomial count at 95 %. The structure is known here; that is what makes
// 400 pairs cheap. Offset and noise level, which did not move in any of them, are called
// in a log of twenty at the most, as is each number of the plant.
func TestStudyOfChanges(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 18 logs")
	}
	pairs, rigs := pairsOf(3, 1)
	for _, r := range rigs {
		from := start(t, r)
		type row struct {
			change
			moved, told, seen int
			clear             map[string]int
		}
		var rows []*row
		pooled, inside, numbers, narrower := 0, 0, 0, 0.0
		sizes := make(map[string][]float64)
		for i := range pairs {
			before := knownFit(t, r, uint64(20000+8*i), from)
			list := slices.Clone(changesOfRigs)
			for k := 0; k < len(list); k++ {
				c, s := list[k], r
				c.to(&s)
				after := knownFit(t, s, uint64(20001+8*i+k), from)
				got, err := Compare(context.Background(), before, after, nil, &data.Rig{Name: r.Name}, Options{})
				if err != nil {
					t.Fatal(err)
				}
				at := slices.IndexFunc(rows, func(o *row) bool { return o.name == c.name })
				if at < 0 {
					at, rows = len(rows), append(rows, &row{change: c, clear: make(map[string]int)})
				}
				o := rows[at]
				if k == 0 {
					list = append(list, asTold(got.Visible)...)
				}
				if got.Moved {
					o.moved++
				}
				if m, err := Pool(before, after); (err == nil) == got.Moved {
					t.Errorf("%s, %s: moved is %v, pooling says %v", r.Name, c.name, got.Moved, err)
				} else if err == nil && c.name == "nothing" {
					pooled++
					for i, p := range sorted(r.Truth.Den.Roots()) {
						q := m.Poles[i]
						if numbers++; q.Re95.Contains(real(p)) && (imag(p) == 0 || q.Im95.Contains(imag(p))) {
							inside++
						}
						narrower += math.Log(q.ReSD/before.Poles[i].ReSD) / float64(len(m.Poles))
					}
				}
				for _, x := range got.Changes {
					if x.Clear {
						o.clear[strings.Split(x.Name, " near")[0]]++
					}
				}
				for _, v := range got.Visible {
					if v.Size != nil && k == 0 {
						sizes[v.Name] = append(sizes[v.Name], *v.Size)
					}
					if v.Name == c.moved && v.Size != nil && *v.Size <= c.size {
						o.told++
						if got.Moved {
							o.seen++
						}
					}
				}
			}
		}
		visible := ""
		for _, name := range []string{"gain", "unstable pole"} {
			if s := sizes[name]; len(s) > 0 {
				slices.Sort(s)
				visible += fmt.Sprintf(" %s by %.2g %%", name, 100*s[len(s)/2])
			}
		}
		t.Logf("%s: pooled %d, of %d poles %d inside their intervals, deviation %.2f times that of the earlier log", r.Name, pooled, numbers, inside, math.Exp(narrower/float64(pooled)))
		// As if the poles of a pair of logs held or failed together.
		if most := mostByChance(pooled, 1-Confidence) * len(r.Truth.Poles()); numbers-inside > most {
			t.Errorf("%s: %d of %d pooled intervals miss the pole", r.Name, numbers-inside, numbers)
		}
		for _, o := range rows {
			t.Logf("| %s | %d | %s | moved in %d of %d | told visible in %d, of these seen in %d | %v |%s |", r.Name, r.Rows, o.name, o.moved, pairs, o.told, o.seen, o.clear, visible)
			if most := mostByChance(pairs, MovedLevel); o.change.moved == "" && o.moved > most {
				t.Errorf("%s, %s: moved is called in %d of %d pairs of an unchanged rig, want %d at the most", r.Name, o.name, o.moved, pairs, most)
			}
			if most := mostByChance(o.told, 1-seenAs); o.told-o.seen > most {
				t.Errorf("%s, %s: not called in %d of %d pairs that see it in 95 of 100, want %d at the most", r.Name, o.name, o.told-o.seen, o.told, most)
			}
		}
	}
}

// Rigs fitted with too few poles, of which another probe or law finds another best
// plant: that does not read as a moved rig, by the binomial count of 5 % at the most,
// and a change of gain does.
func TestStudyOfApproximateStructures(t *testing.T) {
	if testing.Short() {
		t.Skip("searches a structure")
	}
	pairs, names := 3, []string{"flap"}
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		pairs, _ = strconv.Atoi(v)
		names = []string{"flap", "hover"}
	}
	changes := []change{
		{"nothing", func(r *demorig.Rig) {}, "", 0},
		{"slower probe", func(r *demorig.Rig) { r.DitherHold *= 3 }, "", 0},
		{"stronger probe", func(r *demorig.Rig) { r.Dither *= 2 }, "", 0},
		{"law", func(r *demorig.Rig) { r.Stopgap.Num = r.Stopgap.Num.Scale(1.4) }, "", 0},
		{"gain x 1.12", func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(1.12) }, "gain", 0.12},
		{"gain x 1.5, slower probe", func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(1.5); r.DitherHold *= 3 }, "gain", 0.5},
	}
	if os.Getenv("STEADYRIG_STUDY") == "" {
		changes = []change{changes[1], changes[4]}
	}
	for _, name := range names {
		r, _ := demorig.ByName(name)
		order := 2
		e, rig := experiment(t, r, 39999)
		rig.Model.Order = &order
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Workers: 1})
		if err != nil {
			t.Fatal(err)
		}
		from := m.prediction(r.Period)
		moved, plain, told, seen := make([]int, len(changes)), make([]int, len(changes)), make([]int, len(changes)), make([]int, len(changes))
		for i := range pairs {
			before := knownFit(t, r, uint64(50000+8*i), from)
			for k, c := range changes {
				s := r
				c.to(&s)
				after := knownFit(t, s, uint64(50001+8*i+k), from)
				got, err := Compare(context.Background(), before, after, nil, &data.Rig{Name: r.Name}, Options{})
				if err != nil {
					t.Fatal(err)
				}
				if got.Moved {
					moved[k]++
				}
				if noncentral(got.Statistic, got.Freedom, 0) < MovedLevel {
					plain[k]++
				}
				if v := got.Visible[0]; c.moved != "" && v.Size != nil && *v.Size <= c.size {
					told[k]++
					if got.Moved {
						seen[k]++
					}
				}
			}
		}
		for k, c := range changes {
			t.Logf("| %s by %s | %s | moved in %d of %d (without allowance %d) | told visible in %d, of these seen in %d |", name, m.form(), c.name, moved[k], pairs, plain[k], told[k], seen[k])
			if most := mostByChance(pairs, MovedLevel); c.moved == "" && moved[k] > most {
				t.Errorf("%s, %s: moved is called in %d of %d pairs of an unchanged rig, want %d at the most", name, c.name, moved[k], pairs, most)
			}
			if most := mostByChance(told[k], 1-seenAs); told[k]-seen[k] > most {
				t.Errorf("%s, %s: not called in %d of %d pairs that see it in 95 of 100, want %d at the most", name, c.name, told[k]-seen[k], told[k], most)
			}
		}
	}
}

// Powers of the chi-square test at 5 %: the non-centralities at which it is 0.9 and 0.8
// (Haynam, Govindarajulu & Leone, Tables of the cumulative non-central chi-square
// distribution, in Selected Tables in Mathematical Statistics 1, 1970).
func TestNoncentral(t *testing.T) {
	for _, c := range []struct {
		k        int
		power, l float64
	}{
		{1, 0.9, 10.507}, {2, 0.9, 12.654}, {3, 0.9, 14.171}, {4, 0.9, 15.405}, {5, 0.9, 16.470},
		{1, 0.8, 7.849}, {2, 0.8, 9.635}, {3, 0.8, 10.903}, {4, 0.8, 11.935}, {5, 0.8, 12.828},
	} {
		limit := distuv.ChiSquared{K: float64(c.k)}.Quantile(1 - MovedLevel)
		// Three decimals of l are 1e-4 of the power.
		if got := noncentral(limit, c.k, c.l); !(math.Abs(got-c.power) < 1e-4) {
			t.Errorf("%d degrees of freedom, non-centrality %v: power %.5f, want %v", c.k, c.l, got, c.power)
		}
	}
	if got := noncentral(1e4, 5, 1e4); !(got > 0.4 && got < 0.6) { // mean 10005, deviation 200
		t.Errorf("near the mean of a large non-centrality: %v", got)
	}
}

// What a comparison tells apart: an offset of the supply, a noisier sensor, an
// actuator that has lost part of its range, each alone and found alone.
func TestChangesBesideThePlant(t *testing.T) {
	r, _ := demorig.ByName("hover")
	r.Rows = 5000
	from := start(t, r)
	before := knownFit(t, r, 1, from)
	for _, c := range []struct {
		name string
		to   func(r *demorig.Rig)
	}{
		{"input at rest", func(r *demorig.Rig) { r.U0 += 0.02 }},
		{"noise level", func(r *demorig.Rig) { r.SensorNoise *= 1.3 }},
		{"actuator's upper end", func(r *demorig.Rig) { r.InputLimits[1] = r.U0 + 0.27 }},
	} {
		s := r
		c.to(&s)
		after := knownFit(t, s, 2, from)
		e := logOf(t, s, 2)
		rig := &data.Rig{Name: r.Name, Limits: data.Limits{Input: &r.InputLimits}}
		got, err := Compare(context.Background(), before, after, []*data.Experiment{e}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		var clear []string
		for _, x := range got.Changes {
			if x.Clear {
				clear = append(clear, x.Name)
			}
		}
		if got.Moved || !slices.Equal(clear, []string{c.name}) {
			t.Errorf("%s: moved %v, clear %q: %s", c.name, got.Moved, clear, got.Words)
		}
	}
}

// A log of another sample period is refitted and compared, its noise left out; one in
// other units, and a model without a plant, are refused with a sentence. Nothing moved,
// so both are pooled, with shorter intervals.
func TestRefitOtherPeriodAndUnits(t *testing.T) {
	if testing.Short() {
		t.Skip("searches a structure")
	}
	r, _ := demorig.ByName("reactor")
	r.Rows = 5000
	e, rig := experiment(t, r, 3)
	fast := r
	fast.Period, fast.Stopgap = 1, lti.Tustin(lti.TF{Num: lti.Poly{-1.6, -32}, Den: lti.Poly{1, 1 / 0.6}}, 1)
	f, other := experiment(t, fast, 4)
	ctx := context.Background()
	before, err := Fit(ctx, []*data.Experiment{e}, rig, Options{Workers: 1})
	if err != nil {
		t.Fatal(err)
	}
	after, err := Refit(ctx, []*data.Experiment{f}, other, before, Options{Workers: 1})
	if err != nil {
		t.Fatal(err)
	}
	c, err := Compare(ctx, before, after, []*data.Experiment{f}, other, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if c.ProbabilityByChance < 1e-3 || !c.Structure.Fits {
		t.Errorf("nothing moved, but: %s; %+v", c.Words, c.Structure)
	}
	if len(c.Warnings) != 1 || !strings.Contains(c.Warnings[0], "noise is not compared") || slices.ContainsFunc(c.Changes, func(x Change) bool { return x.Name == "noise level" }) {
		t.Errorf("warnings %q, changes %+v", c.Warnings, c.Changes)
	}
	pooled, err := Pool(before, after)
	if err != nil {
		t.Fatal(err)
	}
	if err := pooled.validate(); err != nil {
		t.Error(err)
	}
	for i, p := range pooled.Poles {
		if a, b := before.Poles[i].ReSD, after.Poles[i].ReSD; !(p.ReSD < a && p.ReSD < b) {
			t.Errorf("pooled pole %.3g is known to %.3g, alone to %.3g and %.3g", p.Re, p.ReSD, a, b)
		}
	}
	other.Units.Output = "K"
	if _, err := Compare(ctx, before, after, []*data.Experiment{f}, other, Options{}); err == nil || !strings.Contains(err.Error(), "K") {
		t.Errorf("other units: %v", err)
	}
	if _, err := Refit(ctx, []*data.Experiment{f}, other, newModel(nil, rig), Options{}); err == nil || !strings.Contains(err.Error(), "no plant") {
		t.Errorf("no plant: %v", err)
	}
}

// The same as a user would do it: the earlier log fitted blind, the new one refitted.
func TestStudyOfBlindPairs(t *testing.T) {
	if os.Getenv("STEADYRIG_STUDY") == "" {
		t.Skip("searches a structure for each pair: set STEADYRIG_STUDY to the number of pairs")
	}
	pairs, rigs := pairsOf(0, 0)
	for _, r := range rigs {
		moved, compared, other := make([]int, len(changesOfRigs)), 0, 0
		for i := range pairs {
			seed := uint64(60000 + 6*i)
			e, rig := experiment(t, r, seed)
			before, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Workers: 1})
			if err != nil {
				t.Logf("%s, seed %d: %v", r.Name, seed, err)
				continue
			}
			compared++
			for k, c := range changesOfRigs {
				s := r
				c.to(&s)
				f, rig := experiment(t, s, seed+1+uint64(k))
				exps := []*data.Experiment{f}
				after, err := Refit(context.Background(), exps, rig, before, Options{Workers: 1})
				if err != nil {
					t.Fatalf("%s, seed %d: %v", r.Name, seed, err)
				}
				got, err := Compare(context.Background(), before, after, exps, rig, Options{})
				if err != nil {
					t.Fatalf("%s, seed %d: %v", r.Name, seed, err)
				}
				if got.Moved {
					moved[k]++
				}
				if c.moved == "" && !got.Structure.Fits {
					other++
				}
				if (got.Moved) != (c.moved != "") {
					t.Logf("%s, seed %d, %s: %s; %+v %q", r.Name, seed, c.name, got.Words, got.Structure, got.Warnings)
				}
			}
		}
		for k, c := range changesOfRigs {
			t.Logf("| %s | %d | %s | moved in %d of %d |", r.Name, r.Rows, c.name, moved[k], compared)
			if most := mostByChance(compared, MovedLevel); c.moved == "" && moved[k] > most {
				t.Errorf("%s, %s: moved is called in %d of %d pairs of an unchanged rig, want %d at the most", r.Name, c.name, moved[k], compared, most)
			}
		}
		t.Logf("%s: the structure of the earlier log is called wrong in %d of %d pairs of unchanged rigs", r.Name, other, 3*compared)
	}
}
