package fitting

import (
	"fmt"
	"io"
	"math"
	"strings"
	"text/tabwriter"

	"distal/experiments/psychometric"
)

// WriteTable writes the report for people to read.
func (r *Report) WriteTable(w io.Writer) error {
	p := &printer{w: w}
	d := r.Model
	p.line("%s function on a %s scale, guess rate %g, lapse rate %s.", capital(d.Function), d.Scale, d.Guess, d.Lapse)
	p.line("Threshold at %s; %g%% intervals by profile likelihood.", d.Criterion, 100*d.Confidence)
	for i := range r.Fits {
		p.line("")
		r.Fits[i].write(p, r)
	}
	if c := r.Comparison; c != nil {
		p.line("")
		writeComparison(p, c)
	}
	if s := r.Summary; s != nil {
		p.line("")
		s.write(p, r.model)
	}
	return p.err
}

// printer keeps the first error.
type printer struct {
	w   io.Writer
	err error
}

func (p *printer) line(format string, args ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format+"\n", args...)
	}
}

// table prints rows of tab-separated cells in columns.
func (p *printer) table(rows []string) {
	t := tabwriter.NewWriter(p.w, 0, 0, 2, ' ', 0)
	for _, row := range rows {
		if p.err == nil {
			_, p.err = fmt.Fprintln(t, row)
		}
	}
	if err := t.Flush(); p.err == nil {
		p.err = err
	}
}

func capital(s string) string { return strings.ToUpper(s[:1]) + s[1:] }

func (f *Fit) write(p *printer, r *Report) {
	x := f.Result
	title := fmt.Sprintf("%d trials at %d levels", x.Trials, x.Levels)
	if f.Group != "" {
		title = fmt.Sprintf("%s = %s: %s", r.columns.By, f.Group, title)
	}
	if f.Missing > 0 {
		title += fmt.Sprintf(" (%d without a response left out)", f.Missing)
	}
	p.line("%s", title)
	rows := []string{"\testimate\tse\tinterval"}
	rows = append(rows, row("threshold", x.Threshold, false), row("slope", x.Slope, r.model.Slope > 0), row("lapse rate", x.Lapse, !r.model.Lapse.Free))
	p.table(rows)
	fit := fmt.Sprintf("log-likelihood %.6f, deviance %.4f with %d degrees of freedom", x.LogLikelihood, x.Deviance, x.DegreesOfFreedom())
	if f.Bootstrap != nil && f.Bootstrap.Deviance != nil {
		fit += fmt.Sprintf(", Monte Carlo p = %.3g", f.Bootstrap.Deviance.P)
	}
	p.line("%s", fit)
	if b := f.Bootstrap; b != nil {
		p.line("bootstrap of %d samples: threshold %s (BCa), %s (percentile)", b.Samples, interval(b.Threshold.BCa), interval(b.Threshold.Percentile))
	}
	if q := f.Posterior; q != nil && q.Threshold.Interval.Closed() {
		p.line("posterior: threshold %s (median), %s (credible)", number(q.Threshold.Median), interval(q.Threshold.Interval))
	} else if q != nil {
		p.line("posterior: threshold %s (credible)", interval(q.Threshold.Interval))
	}
	p.line("%s: %s", x.Status, x.Explanation)
	for _, note := range append(x.Notes, f.Note) {
		if note != "" {
			p.line("%s", note)
		}
	}
}

func row(name string, e psychometric.Estimate, fixed bool) string {
	switch {
	case fixed:
		return fmt.Sprintf("%s\t%s\tfixed\t", name, number(e.Value))
	case !e.Valid:
		return fmt.Sprintf("%s\tnone\t\t%s", name, interval(e.Interval))
	case e.SE == 0:
		return fmt.Sprintf("%s\t%s\t\t%s", name, number(e.Value), interval(e.Interval))
	}
	return fmt.Sprintf("%s\t%s\t%s\t%s", name, number(e.Value), number(e.SE), interval(e.Interval))
}

// number has five significant digits.
func number(x float64) string {
	if x != 0 && (math.Abs(x) < 1e-4 || math.Abs(x) >= 1e6) {
		return fmt.Sprintf("%.4e", x)
	}
	return fmt.Sprintf("%.5g", x)
}

func interval(i psychometric.Interval) string {
	switch {
	case i.OpenLow && i.OpenHigh:
		return "open"
	case i.OpenLow:
		return "below " + number(i.High)
	case i.OpenHigh:
		return "above " + number(i.Low)
	}
	return number(i.Low) + " to " + number(i.High)
}

func writeComparison(p *printer, c *psychometric.Comparison) {
	p.line("Do the groups share a parameter? (likelihood ratio)")
	rows := []string{"shared\tstatistic\tdf\tp\t"}
	for _, t := range c.Tests {
		remark := ""
		if !t.Reliable {
			remark = "approximate: a fit has no maximum"
		}
		rows = append(rows, fmt.Sprintf("%s\t%.3f\t%d\t%.3g\t%s", t.Parameter, t.Statistic, t.DegreesOfFreedom, t.P, remark))
	}
	p.table(rows)
}

func (s *GroupSummary) write(p *printer, m psychometric.Model) {
	if g := s.RandomEffects; g != nil {
		unit := "the level's unit"
		center, i, prediction := g.Mean.Value, g.Mean.Interval, g.Prediction
		if m.Scale == psychometric.Log10 || m.Shape == psychometric.Weibull {
			unit = "log10 units"
			center = math.Pow(10, center)
			i.Low, i.High = math.Pow(10, i.Low), math.Pow(10, i.High)
			prediction.Low, prediction.High = math.Pow(10, prediction.Low), math.Pow(10, prediction.High)
		}
		p.line("Group threshold (random effects of %d): %s, %s; a further one %s; standard deviation between groups %s %s.", g.Count, number(center), interval(i), interval(prediction), number(g.Tau), unit)
	}
	if s.Note != "" {
		p.line("%s", s.Note)
	}
	h := s.Hierarchy
	p.line("Hierarchical fit: threshold %s, %s; standard deviation between groups %s on the scale; slope %s, between groups a factor of %s.", number(h.Threshold.Value), interval(h.Threshold.Interval), number(h.ThresholdSD), number(h.Slope), number(h.SlopeFactor))
	rows := []string{"\talone\twith the group\tinterval\tweight of the group"}
	for _, x := range h.Runs {
		alone := x.SingleStatus.String()
		if x.Single.Valid {
			alone = number(x.Single.Value)
		}
		rows = append(rows, fmt.Sprintf("%s\t%s\t%s\t%s\t%.2f", x.Name, alone, number(x.Threshold.Value), interval(x.Threshold.Interval), x.Shrinkage))
	}
	p.table(rows)
}
