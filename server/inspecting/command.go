package inspecting

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"os"
	"strings"

	"distal/experiments/study"
)

// Command is `distal inspect`, for kong.
type Command struct {
	File     string    `arg:"" help:"Study file, or the name of a study of the library (${library})."`
	Refresh  []float64 `default:"60,120" help:"Refresh rates in Hz, separated by commas."`
	PxPerDeg float64   `name:"px-per-deg" default:"40" help:"Pixels a degree."`
	Levels   int       `default:"5" help:"Levels of each procedure, from the lowest to the highest."`
	Output   string    `short:"o" default:"report.html" placeholder:"FILE" help:"Page to write."`
}

// Help explains what is computed.
func (*Command) Help() string {
	return strings.TrimSpace(`
Example: distal inspect motion-coherence --refresh 60,120 --px-per-deg 40 -o report.html

Makes the study's frames with the real engine, draws them in linear light and writes a page
with, for each block and condition: frames, space-time pictures along and across the motion,
directional motion energy and a correlation detector at each level, the velocity that the
spectrum peaks at, displacement per frame with warnings (aliasing, jumps beyond the spacing of
dots, small elements and steps, large fields), flashes after WCAG 2.3.1, striped patterns, grey
levels and contrast.

Exit code 0: inspected; 1: something failed; 2: the study file has problems, or exceeds the
limits on flashes or stripes without an approval in about.flash_approval.`)
}

// Do inspects a study, writes the page and prints a summary. held is true where the
// study cannot be launched as it is.
func (c *Command) Do(ctx context.Context, s *study.Study, out, told io.Writer) (held bool, err error) {
	o := Usual()
	o.RefreshHz, o.PxPerDeg, o.Levels = c.Refresh, c.PxPerDeg, c.Levels
	last := -1
	in, err := Inspect(ctx, s, o, func(share float64) {
		if percent := int(100 * share); percent != last {
			last = percent
			fmt.Fprintf(told, "\rinspecting %3d %%", percent)
		}
	})
	fmt.Fprint(told, "\r               \r")
	if err != nil {
		return false, err
	}
	var page bytes.Buffer
	if err := in.Write(&page); err != nil {
		return false, err
	}
	if err := os.WriteFile(c.Output, page.Bytes(), 0o644); err != nil {
		return false, err
	}
	for _, f := range in.Findings {
		for _, r := range f.Rates {
			for _, w := range r.Sampling.Warnings {
				fmt.Fprintf(out, "%s%s, %g Hz: %s\n", f.Block, map[bool]string{true: ", " + f.Name}[f.Name != ""], r.RefreshHz, w.Text)
			}
		}
	}
	hazard := in.Hazard()
	switch {
	case hazard == "":
		fmt.Fprintln(out, "no flashes or stripes beyond the limits")
	case in.Approval != "":
		fmt.Fprintf(out, "%s\napproved: %s\n", hazard, in.Approval)
	default:
		fmt.Fprintf(out, "%s\nheld back from launch without an approval in about.flash_approval\n", hazard)
	}
	fmt.Fprintln(out, "wrote", c.Output)
	return hazard != "" && in.Approval == "", nil
}
