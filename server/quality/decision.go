package quality

import (
	"distal/experiments/procedure"
	"distal/experiments/run"
	"distal/experiments/study"
)

// Decisions are the estimates that procedures had after each trial that told
// them something, by the trial's number: the run is taken through its engine
// again. They end where the records do not follow from study and assignment.
func Decisions(s *study.Study, a run.Assignment, records []run.Record) map[int]procedure.Estimate {
	list := map[int]procedure.Estimate{}
	state, err := run.New(s, a)
	if err != nil {
		return list
	}
	for i := range records {
		if state.Apply(&records[i]) != nil {
			return list
		}
		if t := records[i].Trial; t != nil && state.Decider() != nil {
			list[t.Trial] = state.Decider().Estimate()
		}
	}
	return list
}
