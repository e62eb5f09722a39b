package fit_test

import (
	"errors"
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
)

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
