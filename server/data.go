package main

import (
	"context"
	"fmt"
	"os"
	"time"

	"github.com/google/uuid"

	"distal/server/export"
	"distal/server/store"
)

type exportCommand struct {
	connection `embed:""`

	Study     string `arg:"" help:"Link or identifier of the study."`
	Output    string `short:"o" required:"" help:"ZIP file to write."`
	Simulated bool   `help:"Write the simulated runs instead of the human ones: they never stand in one data set."`
}

// Help gives an example.
func (*exportCommand) Help() string {
	return "Example: distal export motion-coherence-7k2m9q -o coherence.zip"
}

func (c *exportCommand) Run(ctx context.Context) error {
	s, end, err := c.open(ctx)
	if err != nil {
		return err
	}
	defer end()
	lab, id, err := findStudy(ctx, s, c.Study)
	if err != nil {
		return err
	}
	d, err := export.Collect(ctx, s, lab, id, c.Simulated, time.Now())
	if err != nil {
		return err
	}
	// Written beside and renamed, so that a half-written archive never stands there.
	temporary := c.Output + ".part"
	f, err := os.Create(temporary)
	if err != nil {
		return err
	}
	if err := export.Write(f, d); err != nil {
		f.Close()
		os.Remove(temporary)
		return err
	}
	if err := f.Close(); err != nil {
		return err
	}
	if err := os.Rename(temporary, c.Output); err != nil {
		return err
	}
	kind := "human"
	if c.Simulated {
		kind = "simulated"
	}
	fmt.Printf("%s: %d %s runs of %s\n", c.Output, len(d.Runs), kind, d.Study.About.Name)
	return nil
}

// findStudy finds a study by its public link or identifier, in any lab.
func findStudy(ctx context.Context, s *store.Store, name string) (lab, id uuid.UUID, err error) {
	lab, st, err := s.FindStudyByLink(ctx, name)
	if err == nil {
		return lab, st.ID, nil
	}
	if id, parseErr := uuid.Parse(name); parseErr == nil {
		labs, err := s.Labs(ctx)
		if err != nil {
			return uuid.Nil, uuid.Nil, err
		}
		for _, lab := range labs {
			if _, err := s.FindStudy(ctx, lab, id); err == nil {
				return lab, id, nil
			}
		}
	}
	return uuid.Nil, uuid.Nil, fmt.Errorf("there is no study with the link or identifier %q", name)
}

type replayCommand struct {
	File string `arg:"" type:"existingfile" help:"Data set written by distal export."`
}

// Help gives an example.
func (*replayCommand) Help() string {
	return "Example: distal replay coherence.zip\n\nNeeds nothing but the file. Exit code 2 if any trial, level or bundle does not agree."
}

func (c *replayCommand) Run() error {
	f, err := os.Open(c.File)
	if err != nil {
		return err
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return err
	}
	d, err := export.Open(f, info.Size())
	if err != nil {
		return fmt.Errorf("%s: %w", c.File, err)
	}
	result := d.Replay(func(done, all int) { fmt.Fprintf(os.Stderr, "\r%d of %d runs", done, all) })
	fmt.Fprintln(os.Stderr)
	for _, p := range result.Problems {
		fmt.Println(p)
	}
	fmt.Printf("%d of %d trials in %d runs agree: levels, values and frames, bit for bit.\n", result.Agree, result.Trials, result.Runs)
	if !result.OK() {
		return errRefused
	}
	return nil
}
