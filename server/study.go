package main

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"time"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/studyfile"
	"distal/experiments/value"
	"distal/server/bundle"
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
	File      string  `arg:"" help:"Study file, or the name of a study of the library (${library})."`
	Observers int     `default:"50" help:"How many simulated observers."`
	Threshold float64 `default:"0.2" help:"Their threshold, in the level's unit: (1 − 1/e) of the way from guessing to the top."`
	Slope     float64 `default:"2" help:"Slope of their Weibull function."`
	Lapse     float64 `default:"0.02" help:"Their lapse rate."`
	Drift     float64 `help:"Growth of log10 threshold in 100 trials."`
	FastGuess float64 `help:"Share of answers given at random before 150 ms."`
	SideBias  float64 `help:"Share of guesses moved to the first choice."`
	Seed      uint64  `default:"1" help:"Seed of the first observer."`
	JSON      bool    `help:"Print JSON."`
}

// Help gives an example.
func (*rehearseCommand) Help() string {
	return "Example: distal rehearse motion-coherence --observers 200 --threshold 0.15\n\nThe observers answer the real run engine: same state machine, procedures, catch trials and exclusion rules."
}

// rehearsed is what rehearse reports.
type rehearsed struct {
	Study          string  `json:"study"`
	Observers      int     `json:"observers"`
	Threshold      float64 `json:"threshold"`
	Estimates      int     `json:"estimates"`
	MeanEstimate   float64 `json:"geometric_mean_estimate"`
	BiasLog10      float64 `json:"bias_log10"`
	SDLog10        float64 `json:"sd_log10"`
	IntervalCovers float64 `json:"interval_95_covers"`
	MeanTrials     float64 `json:"mean_trials"`
	MeanMinutes    float64 `json:"mean_minutes"`
	Excluded       float64 `json:"share_excluded"`
	Refused        float64 `json:"share_refused"`
}

func (c *rehearseCommand) Run() error {
	s, problems := readStudy(c.File)
	if problems.Failed() {
		printProblems(c.File, problems)
		return errRefused
	}
	if c.Observers < 1 || c.Threshold <= 0 || c.Slope <= 0 || c.Lapse < 0 || c.Lapse >= 0.5 {
		return fmt.Errorf("observers must be 1 or more, threshold and slope above 0, lapse from 0 to 0.5")
	}
	report, err := c.rehearse(s)
	if err != nil {
		return err
	}
	if c.JSON {
		return json.NewEncoder(os.Stdout).Encode(report)
	}
	fmt.Printf("%s, %d observers with threshold %.4g, slope %.3g, lapse %.3g\n\n", report.Study, report.Observers, c.Threshold, c.Slope, c.Lapse)
	fmt.Printf("estimate (geometric mean)  %.4g\nbias                       %+.4f log10\nspread                     %.4f log10\n", report.MeanEstimate, report.BiasLog10, report.SDLog10)
	fmt.Printf("95 %% intervals that hold   %.1f %% of %d\n", 100*report.IntervalCovers, report.Estimates)
	fmt.Printf("measurement trials         %.1f\nminutes                    %.1f\nexcluded by rules          %.1f %%\nrefused                    %.1f %%\n",
		report.MeanTrials, report.MeanMinutes, 100*report.Excluded, 100*report.Refused)
	return nil
}

func (c *rehearseCommand) rehearse(s *study.Study) (rehearsed, error) {
	report := rehearsed{Study: s.About.Name, Observers: c.Observers, Threshold: c.Threshold}
	rules, err := quality.Compile(s.Exclusions)
	if err != nil {
		return report, err
	}
	observer := rehearsal.Observer{Threshold: c.Threshold, Slope: c.Slope, Lapse: c.Lapse, Drift: c.Drift, FastGuess: c.FastGuess, SideBias: c.SideBias}
	screen := rehearsal.DefaultScreen()
	screen.SkipDisplays = true
	var logs []float64
	covered := 0
	for i := range c.Observers {
		records, err := rehearsal.Observe(s, run.Assignment{Seed: c.Seed + uint64(i), Order: i}, observer, screen, "rehearsal", 0)
		if err != nil {
			return report, err
		}
		m := quality.Measure(records)
		report.MeanTrials += m.Value("trials") / float64(c.Observers)
		report.MeanMinutes += m.Value("minutes") / float64(c.Observers)
		if records[len(records)-1].Kind == run.KindRefusal {
			report.Refused += 1 / float64(c.Observers)
			continue
		}
		breaches, err := rules.Apply(m)
		if err != nil {
			return report, err
		}
		if len(breaches) > 0 {
			report.Excluded += 1 / float64(c.Observers)
		}
		for _, t := range quality.Thresholds(s, records) {
			if !t.Known {
				continue
			}
			logs = append(logs, math.Log10(t.Threshold))
			if t.Low <= c.Threshold && c.Threshold <= t.High {
				covered++
			}
		}
	}
	report.summarise(logs, covered)
	return report, nil
}

func (r *rehearsed) summarise(logs []float64, covered int) {
	r.Estimates = len(logs)
	if len(logs) == 0 {
		return
	}
	mean := 0.0
	for _, x := range logs {
		mean += x / float64(len(logs))
	}
	for _, x := range logs {
		r.SDLog10 += (x - mean) * (x - mean)
	}
	r.SDLog10 = math.Sqrt(r.SDLog10 / math.Max(1, float64(len(logs)-1)))
	r.MeanEstimate = math.Pow(10, mean)
	r.BiasLog10 = mean - math.Log10(r.Threshold)
	r.IntervalCovers = float64(covered) / float64(len(logs))
}
