package history

import (
	"cmp"
	"encoding/json"
	"math"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Schema names the version of the entries that this package writes.
const Schema = "steadyrig/history/1"

// Kinds of entries: what was done.
const (
	Fit     = "fit"
	Design  = "design"
	Recheck = "recheck"
)

// An Entry is one line of the file. Angular frequencies in rad/s, times in s, input and output in the log's units.
type Entry struct {
	Schema  string `json:"schema"`
	Kind    string `json:"kind"`
	Made    string `json:"made"` // RFC 3339
	Tool    string `json:"tool"`
	Command string `json:"command"` // the call, as a shell takes it
	Rig     string `json:"rig"`
	Logs    []Log  `json:"logs,omitempty"` // those that the plant was fitted to, of a recheck the new ones alone
	// ModelSHA256 is that of the model file which a fit made, a design used or a recheck compared with.
	ModelSHA256 string   `json:"model_sha256"`
	Verdict     string   `json:"verdict"`
	Plant       *Plant   `json:"plant,omitempty"` // of a fit, and of a recheck's new logs; missing where there is none
	Loops       *Loops   `json:"loops,omitempty"`
	Changed     *Changed `json:"changed,omitempty"`

	Line int             `json:"-"` // where it was read, from 1
	Text json.RawMessage `json:"-"` // as it was read, unknown fields included
}

// A Log is told by its bytes, whatever it is called.
type Log struct {
	File   string `json:"file"`
	SHA256 string `json:"sha256"`
}

// Plant is what matters of a model.
type Plant struct {
	Poles        []Pole          `json:"poles"`
	Gain         *Gain           `json:"gain,omitempty"`
	NoiseSD      float64         `json:"noise_sd"` // of one-step prediction errors, units of the output
	SamplePeriod float64         `json:"sample_period"`
	Followed     *ident.Followed `json:"followed,omitempty"`
}

// A Pole with its deviations and 95 % intervals, rad/s. What a real pole has no use for is left out.
type Pole struct {
	Re                  float64         `json:"re"`
	Im                  float64         `json:"im,omitempty"`
	ReSD                float64         `json:"re_sd"`
	ImSD                float64         `json:"im_sd,omitempty"`
	Re95                ident.Interval  `json:"re_95"`
	Im95                *ident.Interval `json:"im_95,omitempty"`
	ProbabilityUnstable float64         `json:"probability_unstable"`
}

// Gain is the steady gain ("dc") or, of a plant that integrates, the leading coefficient of the numerator
// ("high_frequency").
type Gain struct {
	Of         string         `json:"of"`
	Unit       string         `json:"unit"` // output over input; of the leading coefficient times s^-(poles - zeros)
	Value      float64        `json:"value"`
	SD         float64        `json:"sd"`
	Interval95 ident.Interval `json:"interval_95"`
}

// Loops is what matters of a design.
type Loops struct {
	InnerForm       string   `json:"inner_form"`
	OuterForm       string   `json:"outer_form"`
	Plants          int      `json:"plants"` // of the promise, 0: no promise was counted
	MeetSpec        int      `json:"meet_spec"`
	LowerBound      float64  `json:"lower_bound_95"`
	PeakSensitivity *float64 `json:"peak_sensitivity"` // at the plant input, of the worst drawn plant; null: none
}

// Changed is what a recheck found.
type Changed struct {
	Moved       bool    `json:"moved"`
	Probability float64 `json:"probability_by_chance"`
}

// OfModel is the entry of a fit, or of a recheck's new model once Kind, ModelSHA256, Verdict and Changed are set. sum is
// the SHA-256 of the model file.
func OfModel(m *ident.Model, u data.Units, sum string) Entry {
	e := Entry{Kind: Fit, Rig: m.Rig, ModelSHA256: sum, Verdict: m.Verdict}
	for _, l := range m.Logs {
		e.Logs = append(e.Logs, Log{l.File, l.SHA256})
	}
	if len(m.Plant.Denominator) == 0 {
		return e
	}
	e.Plant = &Plant{Poles: []Pole{}, NoiseSD: m.Noise.SD, SamplePeriod: m.Noise.SamplePeriod, Followed: m.Followed(u)}
	for _, r := range m.Poles {
		p := Pole{Re: r.Re, Im: r.Im, ReSD: r.ReSD, ImSD: r.ImSD, Re95: r.Re95, ProbabilityUnstable: r.ProbabilityUnstable}
		if r.Im95 != (ident.Interval{}) {
			p.Im95 = &r.Im95
		}
		e.Plant.Poles = append(e.Plant.Poles, p)
	}
	of, g := "dc", m.Gain.DC
	if g == nil {
		of, g = "high_frequency", m.Gain.HighFrequency
	}
	if g != nil {
		e.Plant.Gain = &Gain{of, words.Ratio(u.Output, u.Input), g.Value, g.SD, g.Interval95}
	}
	return e
}

// OfLoops is the entry of a design.
func OfLoops(l *design.Loops) Entry {
	e := Entry{Kind: Design, Rig: l.Rig, ModelSHA256: l.ModelSHA256, Verdict: l.Verdict}
	e.Loops = &Loops{InnerForm: l.InnerForm, OuterForm: l.OuterForm}
	if q := l.Promise; q != nil {
		e.Loops.Plants, e.Loops.MeetSpec, e.Loops.LowerBound = q.Plants, q.MeetSpec, q.LowerBound
		if worst := q.PeakS.Worst; !math.IsInf(worst, 0) && !math.IsNaN(worst) {
			e.Loops.PeakSensitivity = &worst
		}
	}
	return e
}

// Rightmost is the pole with the largest real part, of a pair the upper one; nil: there is none.
func (p *Plant) Rightmost() *Pole {
	var best *Pole
	for i := range p.Poles {
		r := &p.Poles[i]
		if best == nil || cmp.Or(cmp.Compare(r.Re, best.Re), cmp.Compare(r.Im, best.Im)) > 0 {
			best = r
		}
	}
	return best
}

// Path is the file of a rig's history: hover.toml has hover.history.jsonl beside it.
func Path(rig string) string {
	if n := len(rig) - len(".toml"); n > 0 && strings.EqualFold(rig[n:], ".toml") {
		rig = rig[:n]
	}
	return rig + ".history.jsonl"
}
