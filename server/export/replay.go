package export

import (
	"fmt"
	"strconv"

	"distal/experiments/replay"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/bundle"
)

// Replayed says how a data set's runs agree with what they must have been.
type Replayed struct {
	Runs     int
	Trials   int
	Agree    int
	Problems []string
}

// OK tells whether everything agrees.
func (r Replayed) OK() bool { return len(r.Problems) == 0 && r.Agree == r.Trials }

// Replay verifies every bundle and re-creates every trial.
func (d *DataSet) Replay(progress func(done, all int)) Replayed {
	var out Replayed
	studies := map[string]*study.Study{}
	for _, signed := range d.Bundles {
		b, _, err := bundle.Verify(signed, d.Keys)
		if err != nil {
			out.Problems = append(out.Problems, "bundle: "+err.Error())
			continue
		}
		studies[b.Digest] = b.Study
	}
	for i := range d.Runs {
		r := &d.Runs[i]
		out.Runs++
		progress(i, len(d.Runs))
		s, ok := studies[r.Bundle]
		seed, err := strconv.ParseUint(r.Seed, 16, 64)
		if !ok || err != nil {
			out.Problems = append(out.Problems, fmt.Sprintf("%s: its bundle or seed is missing", r.Label))
			continue
		}
		report := replay.Verify(s, run.Assignment{Seed: seed, Group: r.Group, Order: r.Order}, r.Records)
		out.Trials += report.Trials
		out.Agree += report.Agree
		for _, p := range report.Problems {
			out.Problems = append(out.Problems, r.Label+": "+p)
		}
		for j := range r.Records {
			if r.Records[j].Bundle != r.Bundle {
				out.Problems = append(out.Problems, fmt.Sprintf("%s: record %d names another bundle", r.Label, r.Records[j].Sequence))
			}
		}
	}
	progress(len(d.Runs), len(d.Runs))
	return out
}
