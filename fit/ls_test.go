package fit_test

import (
	"bufio"
	"errors"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
)

// table reads columns of numbers; lines that begin with # are comments.
func table(t *testing.T, name string) (rows [][]float64) {
	t.Helper()
	f, err := os.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	sc := bufio.NewScanner(f)
	for sc.Scan() {
		if strings.HasPrefix(sc.Text(), "#") {
			continue
		}
		var row []float64
		for _, w := range strings.Fields(sc.Text()) {
			v, err := strconv.ParseFloat(w, 64)
			if err != nil {
				t.Fatal(err)
			}
			row = append(row, v)
		}
		rows = append(rows, row)
	}
	return rows
}

func polynomial(degree int, x []float64) *mat.Dense {
	m := mat.NewDense(len(x), degree+1, nil)
	for i, v := range x {
		p := 1.0
		for j := range degree + 1 {
			m.Set(i, j, p)
			p *= v
		}
	}
	return m
}

func nistXY(t *testing.T, name string, degree int) (*mat.Dense, []float64) {
	rows := table(t, "testdata/"+name+".txt")
	x, y := make([]float64, len(rows)), make([]float64, len(rows))
	for i, r := range rows {
		y[i], x[i] = r[0], r[1]
	}
	return polynomial(degree, x), y
}

var wamplerDelta = []float64{759, -2048, 2048, -2048, 2523, -2048, 2048, -2048, 1838, -2048, 2048, -2048, 1838, -2048, 2048,
	-2048, 2523, -2048, 2048, -2048, 759}

// wampler returns x = 0 ... 20 and the fifth-degree polynomial y = sum (step x)^k plus noise times the deltas.
func wampler(step, noise float64) (*mat.Dense, []float64) {
	x, y := make([]float64, 21), make([]float64, 21)
	for i := range x {
		x[i] = float64(i)
		for p, k := 1.0, 0; k <= 5; k++ {
			y[i] += p
			p *= step * x[i]
		}
		y[i] += noise * wamplerDelta[i]
	}
	return polynomial(5, x), y
}

func times(k float64, x []float64) []float64 {
	out := make([]float64, len(x))
	for i, v := range x {
		out[i] = k * v
	}
	return out
}

// Certified values of the NIST Statistical Reference Datasets, linear least squares regression. Tolerances: standard
// errors are not refined and keep 1e-16 times the condition number of the scaled columns, 1e2 (Norris) to 1e4 (Longley,
// Wampler); the powers of x of Filip are themselves rounded and its condition number is 1e10.
func TestNISTLinear(t *testing.T) {
	ones := []float64{1, 1, 1, 1, 1, 1}
	w3 := []float64{2152.32624678170, 2363.55173469681, 779.343524331583, 101.475507550350, 5.64566512170752, 0.112324854679312}
	longley := func() (*mat.Dense, []float64) {
		rows := table(t, "testdata/longley.txt")
		x, y := mat.NewDense(len(rows), 7, nil), make([]float64, len(rows))
		for i, r := range rows {
			y[i] = r[0]
			x.Set(i, 0, 1)
			for j, v := range r[1:] {
				x.Set(i, j+1, v)
			}
		}
		return x, y
	}
	for _, c := range []struct {
		name           string
		problem        func() (*mat.Dense, []float64)
		coef, se       []float64
		sigma, r2, tol float64
	}{
		{"Norris", func() (*mat.Dense, []float64) { return nistXY(t, "norris", 1) },
			[]float64{-0.262323073774029, 1.00211681802045}, []float64{0.232818234301152, 0.429796848199937e-3},
			0.884796396144373, 0.999993745883712, 1e-12},
		{"Longley", longley,
			[]float64{-3482258.63459582, 15.0618722713733, -0.358191792925910e-01, -2.02022980381683, -1.03322686717359,
				-0.511041056535807e-01, 1829.15146461355},
			[]float64{890420.383607373, 84.9149257747669, 0.334910077722432e-01, 0.488399681651699, 0.214274163161675,
				0.226073200069370, 455.478499142212},
			304.854073561965, 0.995479004577296, 1e-12},
		{"Filip", func() (*mat.Dense, []float64) { return nistXY(t, "filip", 10) },
			[]float64{-1467.48961422980, -2772.17959193342, -2316.37108160893, -1127.97394098372, -354.478233703349,
				-75.1242017393757, -10.8753180355343, -1.06221498588947, -0.670191154593408e-01, -0.246781078275479e-02,
				-0.402962525080404e-04},
			[]float64{298.084530995537, 559.779865474950, 466.477572127796, 227.204274477751, 71.6478660875927,
				15.2897178747400, 2.23691159816033, 0.221624321934227, 0.142363763154724e-01, 0.535617408889821e-03,
				0.896632837373868e-05},
			0.334801051324544e-02, 0.996727416185620, 1e-7},
		{"Wampler3", func() (*mat.Dense, []float64) { return wampler(1, 1) }, ones, w3, 2360.14502379268, 0.999995559025820, 1e-12},
		{"Wampler4", func() (*mat.Dense, []float64) { return wampler(1, 100) }, ones, times(100, w3), 236014.502379268, 0.957478440825662, 1e-12},
		{"Wampler5", func() (*mat.Dense, []float64) { return wampler(1, 10000) }, ones, times(10000, w3), 23601450.2379268, 0.224668921574940e-2, 1e-12},
	} {
		t.Run(c.name, func(t *testing.T) {
			x, y := c.problem()
			res, err := fit.LeastSquares(x, y)
			if err != nil {
				t.Fatal(err)
			}
			for j := range c.coef {
				near(t, "coefficient", res.Coef[j], c.coef[j], c.tol)
				near(t, "standard error", res.SE[j], c.se[j], c.tol)
			}
			near(t, "sigma", res.Sigma, c.sigma, c.tol)
			near(t, "R2", res.R2, c.r2, c.tol)
		})
	}
	// The exact fits: sd certified as 0.
	for _, step := range []float64{1, 0.1} {
		x, y := wampler(step, 0)
		res, err := fit.LeastSquares(x, y)
		if err != nil {
			t.Fatal(err)
		}
		for k, v := range res.Coef {
			near(t, "Wampler1, 2 coefficient", v, math.Pow(step, float64(k)), 1e-8)
		}
		if !(res.Sigma < 1e-8*math.Abs(y[20])) {
			t.Errorf("Wampler1, 2: sigma %g, want 0", res.Sigma)
		}
		near(t, "Wampler1, 2 R2", res.R2, 1, 1e-14)
	}
}

// With y = x the line through zero has R2 about zero (NIST StRD NoInt1 and NoInt2 define it so).
func TestR2WithoutConstant(t *testing.T) {
	// NIST StRD NoInt2: x 4 5 6, y 3 4 4.
	res, err := fit.LeastSquares(mat.NewDense(3, 1, []float64{4, 5, 6}), []float64{3, 4, 4})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "coefficient", res.Coef[0], 0.727272727272727, 1e-14)
	near(t, "standard error", res.SE[0], 0.420827318078432e-01, 1e-13)
	near(t, "R2", res.R2, 0.993348115299335, 1e-14)
}

func TestLeastSquaresDependentColumns(t *testing.T) {
	x := mat.NewDense(4, 2, []float64{1, 3, 2, 6, 3, 9, 4, 12})
	_, err := fit.LeastSquares(x, []float64{1, 2, 2, 5})
	var c fit.Condition
	if !errors.As(err, &c) || !(float64(c) > 1e14) {
		t.Errorf("one column three times the other: error %v, want a Condition above 1e14", err)
	}
	if _, err := fit.LeastSquares(mat.NewDense(2, 2, []float64{1, 0, 1, 0}), []float64{1, 2}); !errors.As(err, &c) || !math.IsInf(float64(c), 1) {
		t.Errorf("column of zeros: error %v, want an infinite Condition", err)
	}
	if _, err := fit.LeastSquares(mat.NewDense(2, 1, []float64{1, math.NaN()}), []float64{1, 2}); err == nil || errors.As(err, &c) {
		t.Errorf("NaN among the regressors: error %v", err)
	}
	if _, err := fit.LeastSquares(mat.NewDense(1, 2, []float64{1, 1}), []float64{1}); err == nil {
		t.Error("one row for two parameters: no error")
	}
	res, err := fit.LeastSquares(mat.NewDense(2, 2, []float64{1, 1, 1, 2}), []float64{1, 3})
	if err != nil || math.Abs(res.Coef[1]-2) > 1e-14 || !math.IsNaN(res.Sigma) || res.DF != 0 {
		t.Errorf("as many rows as parameters: %+v, %v", res, err)
	}
}
