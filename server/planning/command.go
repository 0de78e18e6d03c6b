package planning

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"strings"
	"text/tabwriter"

	"distal/experiments/study"
	"distal/server/fitting"
)

// Command is `distal plan`, for kong.
type Command struct {
	File       string  `arg:"" help:"Study file, or the name of a study of the library (${library})."`
	Precision  float64 `default:"0.06" help:"Wanted root mean square error of one run's threshold, in log10 units (0.06 is 15 %)."`
	Difference float64 `default:"0.1" help:"Difference between two groups that is to be found, in log10 units (0.1 is a factor of 1.26)."`
	Power      float64 `default:"0.8" help:"Probability of finding it."`
	Alpha      float64 `default:"0.05" help:"Level of the two-sided test."`
	Most       int     `default:"240" help:"Most trials of one threshold to look at."`

	Observers   int     `default:"100" help:"How many simulated observers."`
	Threshold   float64 `default:"0.2" help:"Their median threshold, in the level's unit."`
	ThresholdSD float64 `name:"threshold-sd" default:"0.15" help:"Standard deviation of log10 threshold between observers."`
	Slope       float64 `default:"3.5" help:"Slope of their Weibull function."`
	Lapse       float64 `default:"0.02" help:"Their lapse rate."`
	Seed        uint64  `default:"1" help:"Seed of the first observer."`

	JSON   bool   `name:"json" help:"Print JSON instead of tables."`
	Output string `short:"o" placeholder:"FILE" help:"Also draw both curves, as .svg, .png or .pdf."`
}

// Help explains what a plan is made of.
func (*Command) Help() string {
	return strings.TrimSpace(`
Example: distal plan motion-coherence --threshold 0.2 --difference 0.1 -o plan.svg

Simulated observers take the study's first measured threshold with the real run engine, once
with the study's own procedure and once with each of the others. Every run is fitted after so
many of its trials, as the data of a participant would be. The first table gives the error of
a run's threshold after so many trials, and its efficiency: the least variance that an
unbiased estimate could have, slope and lapse rate being known and every trial standing where
it tells most, over the mean squared error. The second gives the participants in each of two
groups for the difference and power asked for, by Student's test, and what they cost in hours
of all participants: more trials each, or more participants.

A participant's measured threshold is taken to vary by the spread between observers and the
error of measurement together. Minutes are those of the trials and of reading, calibration and
questions; practice comes on top.

Exit code 0: planned; 1: the study cannot be planned; 2: the study file has problems.`)
}

// Question of the command line.
func (c *Command) Question() Question {
	return Question{
		Observers: Observers{Count: c.Observers, Threshold: c.Threshold, ThresholdSD: c.ThresholdSD, Slope: c.Slope, Lapse: c.Lapse, Seed: c.Seed},
		Precision: c.Precision, Difference: c.Difference, Alpha: c.Alpha, Power: c.Power, MostTrials: c.Most,
	}
}

// Do plans a study, writing to out and telling progress on told.
func (c *Command) Do(ctx context.Context, s *study.Study, out, told io.Writer) error {
	var format string
	if c.Output != "" {
		var err error
		if format, err = fitting.FigureFormat(c.Output); err != nil {
			return err
		}
	}
	last := -1
	p, err := Make(ctx, s, c.Question(), func(share float64) {
		if percent := int(100 * share); percent != last {
			last = percent
			fmt.Fprintf(told, "\rrehearsing %3d %%", percent)
		}
	})
	fmt.Fprint(told, "\r                \r")
	if err != nil {
		return err
	}
	if c.Output != "" {
		var figure bytes.Buffer
		if err := p.WriteFigure(&figure, format); err != nil {
			return err
		}
		if err := os.WriteFile(c.Output, figure.Bytes(), 0o644); err != nil {
			return err
		}
	}
	if c.JSON {
		return json.NewEncoder(out).Encode(p)
	}
	return p.WriteText(out)
}

// WriteText prints the plan as tables.
func (p *Plan) WriteText(out io.Writer) error {
	fmt.Fprintf(out, "%s, block %s: %d observers, threshold %.4g (sd %.3g log10), slope %.3g, lapse %.3g\n",
		p.Study, p.Block, p.Count, p.Threshold, p.ThresholdSD, p.Slope, p.Lapse)
	w := tabwriter.NewWriter(out, 0, 0, 2, ' ', tabwriter.AlignRight)
	for _, l := range p.Lines {
		fmt.Fprintf(w, "\n%s\n", l.Procedure)
		fmt.Fprintln(w, "trials\tRMSE log10\tbias log10\tno estimate\tefficiency\tminutes\tper group\tparticipant hours\t")
		for _, m := range l.Marks {
			people, hours := "–", "–"
			if m.Participants > 0 {
				people, hours = fmt.Sprint(m.Participants), fmt.Sprintf("%.1f", m.Hours)
			}
			fmt.Fprintf(w, "%d\t%.4f\t%+.4f\t%.3f\t%.2f\t%.1f\t%s\t%s\t\n", m.Trials, m.RMSELog10, m.BiasLog10, m.Missing, m.Efficiency, m.Minutes, people, hours)
		}
		if err := w.Flush(); err != nil {
			return err
		}
		fmt.Fprintln(out, l.words(p.Question))
	}
	return nil
}

// words is the answer for one procedure in a sentence or two.
func (l Line) words(q Question) string {
	text := fmt.Sprintf("An error of %.3g log10 is not reached with %d trials.", q.Precision, q.MostTrials)
	if l.TrialsNeeded > 0 {
		text = fmt.Sprintf("An error of %.3g log10 needs %d trials.", q.Precision, l.TrialsNeeded)
	}
	if l.Cheapest >= 0 {
		m := l.Marks[l.Cheapest]
		text += fmt.Sprintf(" A difference of %.3g log10 costs least with %d trials each: %d participants in each group, %.1f hours in all.", q.Difference, m.Trials, m.Participants, m.Hours)
	} else {
		text += fmt.Sprintf(" A difference of %.3g log10 cannot be planned.", q.Difference)
	}
	return text
}
