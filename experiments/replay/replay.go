// Package replay re-creates recorded runs: from study, assignment and records
// alone it computes what every trial must have been and compares.
package replay

import (
	"strconv"

	"distal/experiments/run"
	"distal/experiments/study"
)

// Report says how far a run's records agree with what they must have been.
type Report struct {
	Records  int
	Trials   int
	Agree    int // trials whose level, values, truths and frames are the same, bit for bit
	Problems []string
	Outcome  run.StepKind // what comes after the last record
}

// OK tells whether everything agrees.
func (r *Report) OK() bool { return len(r.Problems) == 0 && r.Agree == r.Trials }

// Verify re-creates a run. Records must be in order of their sequence.
func Verify(s *study.Study, a run.Assignment, records []run.Record) Report {
	var report Report
	state, err := run.New(s, a)
	if err != nil {
		report.Problems = append(report.Problems, err.Error())
		return report
	}
	for i := range records {
		rec := &records[i]
		report.Records++
		digest, truths := "", false
		if rec.Kind == run.KindTrial {
			report.Trials++
			digest = state.Redraw(rec.Trial)
			truths = state.SameTruths(rec.Trial)
		}
		if err := state.Apply(rec); err != nil {
			report.Problems = append(report.Problems, "record "+strconv.Itoa(rec.Sequence)+": "+err.Error())
			return report
		}
		if rec.Kind != run.KindTrial {
			continue
		}
		if digest != rec.Trial.Digest {
			report.Problems = append(report.Problems, "trial "+strconv.Itoa(rec.Trial.Trial)+": the frames' digest is "+digest+", recorded "+rec.Trial.Digest)
			continue
		}
		if !truths {
			report.Problems = append(report.Problems, "trial "+strconv.Itoa(rec.Trial.Trial)+": what the display reports of itself differs")
			continue
		}
		report.Agree++
	}
	report.Outcome = state.Next().Kind
	return report
}
