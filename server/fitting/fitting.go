package fitting

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strconv"

	"distal/experiments/psychometric"
)

// Options of a fit, as on the command line.
type Options struct {
	Columns
	Shape      string
	Scale      string // empty: log10
	Guess      float64
	Lapse      string  // "free" or a number
	LapseMax   float64 // bound of a free lapse rate; 0: psychometric.DefaultLapseMax
	Symmetric  bool
	Falling    bool
	Slope      float64
	At         float64 // proportion correct at the threshold; 0: the function's own location
	Confidence float64 // 0: 0.95
	Plain      bool    // plain profile interval of the threshold
	Bootstrap  int     // samples; 0: none
	Seed       uint64
	Posterior  bool
	Compare    bool
	Group      bool
}

// Model is the model that the options describe.
func (o Options) Model() (psychometric.Model, error) {
	m := psychometric.Model{
		Guess: o.Guess, Symmetric: o.Symmetric, Falling: o.Falling, Slope: o.Slope,
		Confidence: o.Confidence, PlainProfile: o.Plain,
	}
	var err error
	if m.Shape, err = psychometric.ParseShape(o.Shape); err != nil {
		return m, err
	}
	if o.Scale != "" {
		if m.Scale, err = psychometric.ParseScale(o.Scale); err != nil {
			return m, err
		}
	}
	if o.Lapse == "free" {
		m.Lapse = psychometric.LapseRule{Free: true, Max: o.LapseMax}
	} else {
		rate, err := strconv.ParseFloat(o.Lapse, 64)
		if err != nil {
			return m, fmt.Errorf("lapse %q is neither free nor a number", o.Lapse)
		}
		m.Lapse = psychometric.FixedLapse(rate)
	}
	if o.At != 0 {
		m.Criterion = psychometric.AtProportion(o.At)
	}
	return m, m.Check()
}

// Fit is one group's fit with what was asked for beside it.
type Fit struct {
	Group     string                  `json:"group,omitempty"`
	Missing   int                     `json:"missing_responses"`
	Result    *psychometric.Result    `json:"result"`
	Levels    []psychometric.LevelFit `json:"levels"`
	Bootstrap *psychometric.Bootstrap `json:"bootstrap,omitempty"`
	Posterior *psychometric.Posterior `json:"posterior,omitempty"`
	Note      string                  `json:"note,omitempty"` // why something asked for is absent
	model     psychometric.Model
}

// Report is everything that is printed.
type Report struct {
	Model      Description              `json:"model"`
	Fits       []Fit                    `json:"fits"`
	Comparison *psychometric.Comparison `json:"comparison,omitempty"`
	Summary    *GroupSummary            `json:"group,omitempty"`
	columns    Columns
	model      psychometric.Model
}

// Description is the model in words and numbers.
type Description struct {
	Function   string  `json:"function"`
	Scale      string  `json:"scale"`
	Guess      float64 `json:"guess"`
	Lapse      string  `json:"lapse"`
	Criterion  string  `json:"threshold_at"`
	Confidence float64 `json:"confidence"`
	Likelihood string  `json:"likelihood"`
}

// GroupSummary is what all groups say together.
type GroupSummary struct {
	// RandomEffects is on the scale: of log10 thresholds on a log10 scale.
	RandomEffects *psychometric.RandomEffects `json:"random_effects_on_scale,omitempty"`
	Hierarchy     *psychometric.Hierarchy     `json:"hierarchy"`
	Note          string                      `json:"note,omitempty"`
}

// likelihood is the formula, for help and JSON.
const likelihood = "P(x) = g + (1 - g - l) F(b (z - a)); log L = sum of K ln P + (N - K) ln(1 - P), without binomial coefficients"

// Run reads a table, fits it and returns the report.
func Run(in io.Reader, o Options) (*Report, error) {
	m, err := o.Model()
	if err != nil {
		return nil, err
	}
	groups, err := Read(in, o.Columns)
	if err != nil {
		return nil, err
	}
	r := &Report{Model: describe(m), columns: o.Columns, model: m}
	for _, g := range groups {
		f, err := fitGroup(g, m, o)
		if err != nil {
			if g.Name != "" {
				return nil, fmt.Errorf("%s: %w", g.Name, err)
			}
			return nil, err
		}
		r.Fits = append(r.Fits, *f)
	}
	if err := r.together(groups, m, o); err != nil {
		return nil, err
	}
	return r, nil
}

func describe(m psychometric.Model) Description {
	d := Description{
		Function: m.Shape.String(), Scale: m.Scale.String(), Guess: m.Guess,
		Criterion: m.Criterion.String(), Confidence: m.Confidence, Likelihood: likelihood,
	}
	if d.Confidence == 0 {
		d.Confidence = 0.95
	}
	if d.Lapse = fmt.Sprintf("fixed at %g", m.Lapse.Value); m.Lapse.Free {
		bound := m.Lapse.Max
		if bound == 0 {
			bound = psychometric.DefaultLapseMax
		}
		d.Lapse = fmt.Sprintf("free from 0 to %g", bound)
	}
	return d
}

func fitGroup(g Group, m psychometric.Model, o Options) (*Fit, error) {
	r, err := psychometric.Fit(g.Data, m)
	if err != nil {
		return nil, err
	}
	f := &Fit{Group: g.Name, Missing: g.Missing, Result: r, Levels: r.LevelFits(), model: m}
	if o.Bootstrap > 0 {
		f.Bootstrap, err = r.Bootstrap(psychometric.BootstrapOptions{Samples: o.Bootstrap, Seed: o.Seed})
		if errors.Is(err, psychometric.ErrNoThreshold) {
			f.Note = "No bootstrap: the fit has no threshold."
		} else if err != nil {
			return nil, err
		}
	}
	if o.Posterior {
		if f.Posterior, err = psychometric.FitPosterior(g.Data, m, psychometric.Prior{}); err != nil {
			return nil, err
		}
	}
	return f, nil
}

// together adds the comparison and the summary of all groups.
func (r *Report) together(groups []Group, m psychometric.Model, o Options) error {
	if !o.Compare && !o.Group {
		return nil
	}
	if len(groups) < 2 {
		return errors.New("comparing or summarising groups needs --by a column with two values or more")
	}
	conditions := make([]psychometric.Condition, len(groups))
	var z, se []float64
	for i, g := range groups {
		conditions[i] = psychometric.Condition{Name: g.Name, Data: g.Data}
		if f := r.Fits[i].Result; f.Threshold.Valid && f.Status <= psychometric.Open {
			z = append(z, f.OnScale.Value)
			se = append(se, f.OnScale.SE)
		}
	}
	var err error
	if o.Compare {
		if r.Comparison, err = psychometric.Compare(conditions, m); err != nil {
			return fmt.Errorf("compare groups: %w", err)
		}
	}
	if !o.Group {
		return nil
	}
	r.Summary = &GroupSummary{}
	if r.Summary.Hierarchy, err = psychometric.FitHierarchy(conditions, m); err != nil {
		return fmt.Errorf("summarise groups: %w", err)
	}
	r.Summary.RandomEffects, err = psychometric.SummariseGroup(z, se, o.Confidence)
	if errors.Is(err, psychometric.ErrTooFewUnits) {
		r.Summary.Note = "Fewer than two groups have a sound threshold of their own: no random-effects summary."
		return nil
	}
	return err
}

// WriteJSON writes the report as indented JSON.
func (r *Report) WriteJSON(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(r)
}
