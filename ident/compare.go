package ident

import (
	"context"
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
)

// MovedLevel is the probability by chance below which a rig is said to have moved.
const MovedLevel = 0.05

// Comparison says what moved between an earlier model and a later one.
type Comparison struct {
	// Moved is the joint test of all parameters of the plant at MovedLevel.
	Moved               bool    `json:"moved"`
	ProbabilityByChance float64 `json:"probability_by_chance"` // of the joint test
	Statistic           float64 `json:"statistic"`             // chi-square with Freedom degrees of freedom where nothing moved
	Freedom             float64 `json:"freedom"`
	// Changes lists gain, poles, zeros, delay, noise level, offset and actuator
	// range, in this order.
	Changes []Change `json:"changes"`
	// Visible says what size of change would have been seen in 95 of 100 pairs of
	// such logs.
	Visible []Visible `json:"visible"`
	// Structure says whether the earlier structure fits the new log.
	Structure StructureCheck `json:"structure"`
	// Prediction holds the earlier plant against the new one by what they predict
	// of the new log.
	Prediction PredictionCheck `json:"prediction"`
	Words      string          `json:"words"` // what moved, in a sentence
	Warnings   []string        `json:"warnings"`
}

// Change is one number before and after.
type Change struct {
	Name   string  `json:"name"`
	Unit   string  `json:"unit"`
	Before float64 `json:"before"`
	After  float64 `json:"after"`
	// Interval95 is that of the change: of After/Before where Ratio, else of After - Before.
	Interval95 Interval `json:"interval_95"`
	Ratio      bool     `json:"ratio"`
	// ProbabilityByChance of so large a change in any of the numbers looked at
	// (Holm, A simple sequentially rejective multiple test procedure, Scand. J.
	// Statist. 6 (1979) 65-70).
	ProbabilityByChance float64 `json:"probability_by_chance"`
	Clear               bool    `json:"clear"` // that is below MovedLevel
	Words               string  `json:"words"` // "gain up 12 % (9 to 15)"
}

// Visible is the size of a change that would have been seen.
type Visible struct {
	Name  string  `json:"name"`
	Size  float64 `json:"size"` // as a fraction; +Inf (null) where none would
	Power float64 `json:"power"`
}

// StructureCheck says whether the earlier structure fits the new log.
type StructureCheck struct {
	Earlier string  `json:"earlier"`
	Best    string  `json:"best"`
	BIC     float64 `json:"bic"` // of the earlier above the best, 0: it is the best
	Fits    bool    `json:"fits"`
}

// PredictionCheck compares one-step predictions of the new log, the noise shape
// refitted to each plant.
type PredictionCheck struct {
	Before float64 `json:"before_sd"` // of the errors with the earlier plant, units of the output
	After  float64 `json:"after_sd"`
	Gain   float64 `json:"likelihood_gain"` // of the new plant over the earlier, -2 log likelihood
	Misfit float64 `json:"misfit"`          // what the structure itself misses on the new log, -2 log likelihood
}

// Compare says what moved between an earlier model and a later one, which Refit
// found in exps. It errs where the two cannot be compared.
func Compare(ctx context.Context, before, after *Model, exps []*data.Experiment, rig *data.Rig, opt Options) (*Comparison, error) {
	if before.form() != after.form() {
		return nil, fmt.Errorf("the earlier model has %s, the new one %s: refit the new log in the structure of the earlier one", before.form(), after.form())
	}
	c := &Comparison{Changes: []Change{}, Visible: []Visible{}, Warnings: []string{}}
	n := len(before.Plant.Parameters)
	sum := mat.NewSymDense(n, nil)
	d := mat.NewVecDense(n, nil)
	b, a := before.TF(), after.TF()
	for i, name := range before.Plant.Parameters {
		d.SetVec(i, *parameter(&a, name)-*parameter(&b, name))
		for j := range i + 1 {
			sum.SetSym(i, j, before.Plant.Covariance[i][j]+after.Plant.Covariance[i][j])
		}
	}
	inv := inverse(sum)
	if inv == nil {
		return nil, errors.New("the covariances of the two models do not tell their parameters apart")
	}
	c.Statistic, c.Freedom = mat.Inner(d, inv, d), float64(n)
	c.ProbabilityByChance = distuv.ChiSquared{K: c.Freedom}.Survival(c.Statistic)
	c.Moved = c.ProbabilityByChance < MovedLevel
	if g, h := before.Gain.DC, after.Gain.DC; g != nil && h != nil {
		r, sd := h.Value/g.Value, math.Hypot(g.SD/g.Value, h.SD/h.Value)
		c.Changes = append(c.Changes, Change{Name: "gain", Before: g.Value, After: h.Value, Ratio: true, Interval95: Interval{r * math.Exp(-z95*sd), r * math.Exp(z95*sd)},
			ProbabilityByChance: 2 * distuv.UnitNormal.Survival(math.Abs(math.Log(r))/sd)})
	}
	return c, nil
}
