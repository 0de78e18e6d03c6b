package fitting

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"os"
	"strings"
)

// Command is `distal fit`, for kong.
type Command struct {
	Data    string `arg:"" help:"Table of trials or counts: CSV, or tab-separated, with a header. A hyphen reads standard input."`
	Level   string `required:"" placeholder:"COLUMN" help:"Column of levels."`
	Correct string `required:"" placeholder:"COLUMN" help:"Column of responses, 0 or 1; with --n the number of correct responses."`
	N       string `name:"n" placeholder:"COLUMN" help:"Column of numbers of trials, where rows are counts."`
	By      string `placeholder:"COLUMN" help:"One fit for each value of this column."`

	Shape     string  `default:"weibull" help:"weibull, gumbel, logistic, gaussian or sech (hyperbolic secant)."`
	Scale     string  `default:"log10" enum:"log10,linear" help:"Scale of the level."`
	Guess     float64 `default:"0.5" help:"Guess rate g, the lower asymptote: 1/m for m alternatives, 0 for yes/no."`
	Lapse     string  `default:"0.02" help:"Lapse rate l, or free to estimate it."`
	LapseMax  float64 `placeholder:"RATE" help:"Upper bound of a free lapse rate (0.1)."`
	Symmetric bool    `help:"Lapses go to both answers alike (matching; needs --guess 0)."`
	Falling   bool    `help:"Performance falls as the level rises."`
	Slope     float64 `placeholder:"B" help:"Hold the slope b at this value."`
	At        float64 `placeholder:"P" help:"Read the threshold at this proportion correct instead of at the function's own location."`

	Confidence float64 `default:"0.95" help:"Confidence of the intervals."`
	Plain      bool    `help:"Take the threshold's interval from the plain profile likelihood, without the weight on steep slopes."`
	Bootstrap  int     `placeholder:"SAMPLES" help:"Add a parametric bootstrap: BCa intervals and a Monte Carlo test of fit."`
	Seed       uint64  `default:"1" help:"Seed of the bootstrap."`
	Posterior  bool    `help:"Add the posterior with credible intervals."`
	Compare    bool    `help:"Test by likelihood ratio whether the groups of --by share parameters."`
	Group      bool    `help:"Summarise the groups of --by: random effects and a hierarchical fit."`

	JSON   bool   `name:"json" help:"Print JSON instead of a table."`
	Output string `short:"o" placeholder:"FILE" help:"Also draw a figure, as .svg, .png or .pdf."`
	Label  string `placeholder:"TEXT" help:"What the levels are, with their unit, for the figure."`
}

// Help is the long help: the model, the likelihood and what is printed.
func (*Command) Help() string {
	return strings.TrimSpace(`
Example: distal fit DATA.csv --level coherence --correct correct --shape weibull --guess 0.5 --lapse free -o fit.svg

The probability of a correct response at level x is

    P(x) = g + (1 - g - l) F(b (z - a)),   z = log10 x or x

with guess rate g, lapse rate l, location a and slope b > 0. F(u) is

    weibull, gumbel   1 - exp(-10^u); for weibull z = log10 x on either scale, so that
                      F = 1 - exp(-(x/t)^b) with t = 10^a
    logistic          1/(1 + exp(-u))
    gaussian          the normal distribution function of u, 1/b its standard deviation
    sech              (2/pi) atan(exp(pi u/2))

With K correct responses in N trials at each level the log-likelihood is

    log L = sum of K ln P(x) + (N - K) ln(1 - P(x)),

binomial coefficients left out. It is maximised over a, b and, with --lapse free, over l
between 0 and --lapse-max, with no penalty. The deviance is 2 (log L of the saturated model
- log L), over distinct levels. Standard errors come from the expected information; the
JSON has those from the observed information too.

Intervals are profile-likelihood intervals. That of the threshold gives less weight to
slopes so steep that F rises from 0.1 to 0.9 within less than the tested range R (the
square root of 12 times the standard deviation of the levels): log L - ln(R/rise)^2/2. Plain
intervals are too short for some eighty trials; --plain asks for them. A side that the data
leave open is printed as open, and data that are flat, all correct, all wrong, separable or
too few are called so instead of being given a number.

Rows without a response (empty or n/a) are left out and counted.`)
}

// Options of the command.
func (c *Command) Options() Options {
	return Options{
		Columns: Columns{Level: c.Level, Correct: c.Correct, N: c.N, By: c.By},
		Shape:   c.Shape, Scale: c.Scale, Guess: c.Guess, Lapse: c.Lapse, LapseMax: c.LapseMax,
		Symmetric: c.Symmetric, Falling: c.Falling, Slope: c.Slope, At: c.At,
		Confidence: c.Confidence, Plain: c.Plain,
		Bootstrap: c.Bootstrap, Seed: c.Seed, Posterior: c.Posterior, Compare: c.Compare, Group: c.Group,
	}
}

// Run fits the table and prints to standard output.
func (c *Command) Run() error {
	in := io.Reader(os.Stdin)
	if c.Data != "-" {
		file, err := os.Open(c.Data)
		if err != nil {
			return err
		}
		defer file.Close()
		in = file
	}
	out := bufio.NewWriter(os.Stdout)
	if err := c.run(in, out); err != nil {
		return err
	}
	return out.Flush()
}

func (c *Command) run(in io.Reader, out io.Writer) error {
	format := ""
	if c.Output != "" {
		var err error
		if format, err = FigureFormat(c.Output); err != nil {
			return err
		}
	}
	r, err := Run(in, c.Options())
	if err != nil {
		return fmt.Errorf("%s: %w", c.Data, err)
	}
	if format != "" {
		var figure bytes.Buffer
		if err := r.WriteFigure(&figure, format, c.Label); err != nil {
			return err
		}
		if err := os.WriteFile(c.Output, figure.Bytes(), 0o644); err != nil {
			return err
		}
	}
	if c.JSON {
		return r.WriteJSON(out)
	}
	return r.WriteTable(out)
}
