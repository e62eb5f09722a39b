package published

import (
	"bufio"
	"errors"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
)

// certified is a file of the NIST Statistical Reference Datasets with the values that it certifies.
type certified struct {
	rows      [][]float64 // y first
	coef, sd  []float64
	sigma, r2 float64
}

var (
	parameterLine = regexp.MustCompile(`^\s+B\d+\s+(\S+)\s+(\S+)\s*$`)
	sigmaLine     = regexp.MustCompile(`^\s+Standard Deviation\s+(\S+)\s*$`)
	r2Line        = regexp.MustCompile(`^\s+R-Squared\s+(\S+)\s*$`)
)

func nist(t *testing.T, name string) (c certified) {
	t.Helper()
	f, err := os.Open(filepath.Join(folder, "nist", name+".dat"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	number := func(s string) float64 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		return v
	}
	data := false
	for sc := bufio.NewScanner(f); sc.Scan(); {
		line := sc.Text()
		switch {
		case data:
			var row []float64
			for _, w := range strings.Fields(line) {
				row = append(row, number(w))
			}
			if len(row) > 0 {
				c.rows = append(c.rows, row)
			}
		case strings.HasPrefix(line, "Data:") && !strings.Contains(line, "Variable"):
			data = true // the line that names the columns
		default:
			if m := parameterLine.FindStringSubmatch(line); m != nil {
				c.coef, c.sd = append(c.coef, number(m[1])), append(c.sd, number(m[2]))
			} else if m := sigmaLine.FindStringSubmatch(line); m != nil {
				c.sigma = number(m[1])
			} else if m := r2Line.FindStringSubmatch(line); m != nil {
				c.r2 = number(m[1])
			}
		}
	}
	return c
}

// columns are 1, x, …, x^degree, or with degree 0 the predictors as they are, behind a constant if there is one.
func (c certified) columns(degree int) (*mat.Dense, []float64) {
	x, y := mat.NewDense(len(c.rows), len(c.coef), nil), make([]float64, len(c.rows))
	for i, r := range c.rows {
		y[i] = r[0]
		constant := len(c.coef) - (len(r) - 1)
		for j := range len(c.coef) {
			switch {
			case degree > 0:
				x.Set(i, j, math.Pow(r[1], float64(j)))
			case j < constant:
				x.Set(i, j, 1)
			default:
				x.Set(i, j, r[1+j-constant])
			}
		}
	}
	return x, y
}

// Tolerances: the parameters are refined and keep all digits but those that the rounding of the regressors takes, the
// powers of x of Filip above all; standard errors keep 1e-16 times the condition number of the scaled columns, 1e2
// (Norris) to 1e4 (Longley, Wampler) and 1e10 (Filip). Certified values have 15 digits.
func TestPublishedLeastSquares(t *testing.T) {
	s := open(t, "Least squares")
	for _, c := range []struct {
		id, name string
		degree   int
		tol      float64
	}{
		{"A01", "Norris", 1, 1e-12}, {"", "Pontius", 2, 1e-11}, {"", "NoInt1", 0, 1e-13}, {"", "NoInt2", 0, 1e-13},
		{"A02", "Longley", 0, 1e-12}, {"A03", "Filip", 10, 1e-7}, {"A04", "Wampler1", 5, 1e-14}, {"A05", "Wampler2", 5, 1e-12},
		{"A06", "Wampler3", 5, 1e-12}, {"A07", "Wampler4", 5, 1e-12}, {"A08", "Wampler5", 5, 1e-12},
	} {
		want := nist(t, c.name)
		x, y := want.columns(c.degree)
		res, err := fit.LeastSquares(x, y)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		if len(res.Coef) != len(want.coef) || len(want.coef) == 0 {
			t.Fatalf("%s: %d certified parameters", c.name, len(want.coef))
		}
		var v []value
		for j, b := range want.coef {
			name := "B" + strconv.Itoa(j)
			v = append(v, rel(name, res.Coef[j], b, c.tol))
			if want.sigma > 0 {
				v = append(v, rel("deviation of "+name, res.SE[j], want.sd[j], c.tol))
			}
		}
		if want.sigma > 0 {
			v = append(v, rel("residual deviation", res.Sigma, want.sigma, c.tol))
		} else {
			// An exact fit: what is left is the rounding of y, whose last value is the greatest.
			v = append(v, abs("residual deviation", res.Sigma, 0, 1e-15*y[len(y)-1]))
		}
		v = append(v, abs("R²", res.R2, want.r2, 1e-14+c.tol*(1-want.r2)))
		s.check(c.id, c.name, "NIST Statistical Reference Datasets, linear least squares, "+c.name+".dat", read, v...)
	}

	// The mean is c = 1e6 or 1e7 and the deviations 0.1, so that the data are rounded to 1e-9 and 1e-8 of a deviation.
	var v []value
	for _, c := range []float64{1e6, 1e7} {
		x := []float64{c + 0.2}
		for range 500 {
			x = append(x, c+0.1, c+0.3)
		}
		v = append(v, rel("lag-1 autocorrelation about "+strconv.FormatFloat(c, 'g', 1, 64), fit.Autocorrelation([][]float64{x}, 1)[1], -0.999, 1e-7))
	}
	s.check("A12", "NumAcc3, NumAcc4", "NIST Statistical Reference Datasets, univariate", closed, v...)

	// A regressor that is three times another.
	_, err := fit.LeastSquares(mat.NewDense(4, 2, []float64{1, 3, 2, 6, 3, 9, 4, 12}), []float64{1, 2, 2, 5})
	var cond fit.Condition
	s.check("", "dependent regressors", "definition", closed, verdict("refused as such", errors.As(err, &cond), true))
}
