package main

import (
	"context"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"distal/experiments/library"
	"distal/experiments/study"
	"distal/experiments/studyfile"
	"distal/experiments/value"
	"distal/server/bundle"
	"distal/server/inspecting"
	"distal/server/planning"
	"distal/server/quality"
)

// readStudy reads a study file, or a study of the library by name, and adds
// the problems of its exclusion rules.
func readStudy(name string) (*study.Study, study.Problems) {
	fsys, file := os.DirFS(filepath.Dir(name)), filepath.Base(name)
	if _, err := os.Stat(name); err != nil && isLibrary(name) {
		files, err := library.Files(name)
		if err != nil {
			return nil, study.Problems{{Message: err.Error()}}
		}
		fsys, file = files, "study.yaml"
	}
	s, problems := studyfile.Read(fsys, file)
	if s != nil && !problems.Failed() {
		problems = append(problems, studyfile.Locate(fsys, file, quality.Check(s))...)
	}
	return s, problems
}

func isLibrary(name string) bool {
	for _, n := range library.Names() {
		if n == name {
			return true
		}
	}
	return false
}

type checkCommand struct {
	File string `arg:"" help:"Study file, or the name of a study of the library (${library})."`
}

// Help gives an example.
func (*checkCommand) Help() string {
	return "Example: distal check studies/coherence.yaml\n\nPrints every problem as file:line:column: key: what is wrong and what would be right. Exit code 2 if there are any but warnings."
}

func (c *checkCommand) Run() error {
	s, problems := readStudy(c.File)
	printProblems(c.File, problems)
	if problems.Failed() {
		return errRefused
	}
	fmt.Printf("%s: the study %s can be launched.\n", c.File, s.About.Name)
	return nil
}

// printProblems prints each problem with the line that it is about.
func printProblems(file string, problems study.Problems) {
	if err := studyfile.Print(os.Stdout, os.DirFS(filepath.Dir(file)), problems); err != nil {
		fmt.Fprintln(os.Stderr, "the problems cannot be printed:", err)
	}
}

type schemaCommand struct {
	Reference bool `help:"Print the reference of all keys (Markdown) instead."`
}

func (c *schemaCommand) Run() error {
	if c.Reference {
		fmt.Print(study.Reference())
		return nil
	}
	text, err := value.Canonical(study.JSONSchema())
	if err != nil {
		return err
	}
	fmt.Println(string(text))
	return nil
}

type bundleCommand struct {
	Verify bundleVerifyCommand `cmd:"" help:"Verify a bundle file offline: signature, digests and canonical form."`
}

type bundleVerifyCommand struct {
	File string `arg:"" type:"existingfile" help:"Bundle file, e.g. bundle.json of an exported data set."`
	Keys string `type:"existingfile" help:"Key set to trust instead of the one in the file."`
}

// Help gives an example.
func (*bundleVerifyCommand) Help() string {
	return "Example: distal bundle verify bundle.json --keys keys.json\n\nThe keys in the file prove that bundle and signature belong together; --keys with a key set that you got elsewhere proves who signed."
}

func (c *bundleVerifyCommand) Run() error {
	text, err := os.ReadFile(c.File)
	if err != nil {
		return err
	}
	signed, err := bundle.ReadFile(text)
	if err != nil {
		return err
	}
	keys := bundle.KeySet{}
	if signed.Keys != nil {
		keys = *signed.Keys
	}
	if c.Keys != "" {
		text, err := os.ReadFile(c.Keys)
		if err != nil {
			return err
		}
		keys = bundle.KeySet{}
		if err := json.Unmarshal(text, &keys); err != nil {
			return fmt.Errorf("key set %s: %w", c.Keys, err)
		}
	}
	b, claims, err := bundle.Verify(signed, keys)
	if err != nil {
		fmt.Printf("%s does not verify: %v\n", c.File, err)
		return errRefused
	}
	fmt.Printf("study    %s (%s)\nbundle   %s\nsigned   %s\n", b.Study.About.Name, b.Study.About.Title, b.Digest, claims.IssuedAt.UTC().Format(time.RFC3339))
	for _, name := range []string{bundle.AssetEngine, bundle.AssetScript, bundle.AssetStyle} {
		fmt.Printf("%-16s %s\n", name, b.Assets[name])
	}
	fmt.Println("The bundle verifies.")
	return nil
}

type rehearseCommand struct {
	File        string  `arg:"" help:"Study file, or the name of a study of the library (${library})."`
	Observers   int     `default:"50" help:"How many simulated observers."`
	Threshold   float64 `default:"0.2" help:"Their threshold, in the level's unit: (1 − 1/e) of the way from guessing to the top."`
	ThresholdSD float64 `name:"threshold-sd" help:"Standard deviation of log10 threshold between observers."`
	Slope       float64 `default:"2" help:"Slope of their Weibull function."`
	Lapse       float64 `default:"0.02" help:"Their lapse rate."`
	Drift       float64 `help:"Growth of log10 threshold in 100 trials."`
	Tire        float64 `help:"Growth of the lapse rate in 100 trials."`
	FastGuess   float64 `help:"Share of answers given at random before 150 ms."`
	SideBias    float64 `help:"Share of guesses moved to the first choice."`
	Seed        uint64  `default:"1" help:"Seed of the first observer."`
	JSON        bool    `help:"Print JSON."`
}

// Help gives an example.
func (*rehearseCommand) Help() string {
	return "Example: distal rehearse motion-coherence --observers 200 --threshold 0.15\n\nThe observers answer the real run engine: same state machine, procedures, catch trials and exclusion rules. The spread is printed beside the least that any unbiased estimate could have with as many trials, slope and lapse rate being known; efficiency is the ratio of the variances."
}

func (c *rehearseCommand) Run(ctx context.Context) error {
	s, problems := readStudy(c.File)
	if problems.Failed() {
		printProblems(c.File, problems)
		return errRefused
	}
	r, err := planning.Rehearse(ctx, s, planning.Observers{
		Count: c.Observers, Threshold: c.Threshold, ThresholdSD: c.ThresholdSD, Slope: c.Slope, Lapse: c.Lapse,
		Drift: c.Drift, Tire: c.Tire, FastGuess: c.FastGuess, SideBias: c.SideBias, Seed: c.Seed,
	}, func(done int) {
		if done%10 == 0 || done == c.Observers {
			fmt.Fprintf(os.Stderr, "\rrehearsing %d of %d", done, c.Observers)
		}
	})
	fmt.Fprint(os.Stderr, "\r                              \r")
	if err != nil {
		return err
	}
	if c.JSON {
		return json.NewEncoder(os.Stdout).Encode(r)
	}
	fmt.Printf("%s, %d observers with threshold %.4g, slope %.3g, lapse %.3g\n\n", r.Study, r.Count, c.Threshold, c.Slope, c.Lapse)
	fmt.Printf("estimate (geometric mean)  %.4g\nbias                       %+.4f log10\nspread                     %.4f log10\n", r.MeanEstimate, r.BiasLog10, r.SDLog10)
	fmt.Printf("least possible spread      %.4f log10\nefficiency                 %.2f\n", r.BoundSDLog10, r.Efficiency)
	fmt.Printf("95 %% intervals that hold   %.1f ± %.1f %% of %d\nno estimate                %d\n", 100*r.IntervalCovers, 100*r.CoversSE, r.Estimates, r.Missing)
	fmt.Printf("measurement trials         %.1f\nminutes                    %.1f\nexcluded by rules          %.1f %%\nrefused                    %.1f %%\n",
		r.MeanTrials, r.MeanMinutes, 100*r.Excluded, 100*r.Refused)
	return nil
}

// planCommand reads the study and plans it.
type planCommand struct{ planning.Command }

func (c *planCommand) Run(ctx context.Context) error {
	s, problems := readStudy(c.File)
	if problems.Failed() {
		printProblems(c.File, problems)
		return errRefused
	}
	return c.Do(ctx, s, os.Stdout, os.Stderr)
}

// inspectCommand reads the study and inspects it.
type inspectCommand struct{ inspecting.Command }

func (c *inspectCommand) Run(ctx context.Context) error {
	s, problems := readStudy(c.File)
	if problems.Failed() {
		printProblems(c.File, problems)
		return errRefused
	}
	held, err := c.Do(ctx, s, os.Stdout, os.Stderr)
	if err == nil && held {
		return errRefused
	}
	return err
}
