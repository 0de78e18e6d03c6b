package workspace

import (
	"fmt"
	"math"
	"strconv"

	"distal/experiments/procedure"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/quality"
	"distal/server/store"
	"distal/web/pages"
)

// decisions are the procedures' estimates after each trial of run r.
func decisions(s *study.Study, r store.Run, records []run.Record) map[int]procedure.Estimate {
	seed, err := strconv.ParseUint(r.Seed, 16, 64)
	if err != nil {
		return nil
	}
	return quality.Decisions(s, run.Assignment{Seed: seed, Group: r.Group, Order: r.Order}, records)
}

// stand puts the procedure's own estimates into the plot of threshold t.
func stand(p *pages.RunPlot, t quality.Threshold, list map[int]procedure.Estimate) {
	var last procedure.Estimate
	p.Estimates = make([]pages.Standing, len(t.Trials))
	for i, number := range t.Trials {
		e, ok := list[number]
		if !ok {
			continue
		}
		last = e
		low, high := e.Threshold*math.Pow(10, -e.SDLog10), e.Threshold*math.Pow(10, e.SDLog10)
		if t.Linear && e.Slope == 0 { // the sd of reversals and settings is in the level's unit
			low, high = e.Threshold-e.SDLog10, e.Threshold+e.SDLog10
		}
		p.Estimates[i] = pages.Standing{Known: e.Valid, Threshold: e.Threshold, Low: low, High: high}
	}
	switch {
	case last.Valid && last.Slope > 0:
		p.Standing = fmt.Sprintf("The procedure's own estimate at the end: %.4g, sd %.3f log10 units; slope %.2f, lapse rate %.3f.", last.Threshold, last.SDLog10, last.Slope, last.Lapse)
		if last.Gradient != 0 {
			p.Standing += fmt.Sprintf(" Gradient on the second parameter: %.2f.", last.Gradient)
		}
	case last.Valid:
		p.Standing = fmt.Sprintf("The procedure's own estimate at the end: %.4g from %d turning points or settings, sd %.3g.", last.Threshold, last.Reversals, last.SDLog10)
	case last.Reason != "":
		p.Standing = "The procedure has no estimate: " + last.Reason + "."
	}
}
