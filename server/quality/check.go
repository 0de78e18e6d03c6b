package quality

import (
	"errors"

	"distal/experiments/study"
)

// Check lists what is wrong with a study's exclusion rules.
func Check(s *study.Study) study.Problems {
	var problems study.Problems
	for _, rule := range s.Exclusions {
		_, err := Compile([]study.ExclusionRule{rule})
		var bad *RuleError
		if errors.As(err, &bad) {
			problems = append(problems, study.Problem{Path: "exclusions." + rule.Name + ".when", Offending: rule.When, Message: bad.Message})
		} else if err != nil {
			problems = append(problems, study.Problem{Path: "exclusions", Message: err.Error()})
		}
	}
	return problems
}
