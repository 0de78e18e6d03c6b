package procedure

import (
	"strconv"

	"distal/experiments/exact"
)

// Problem is a setting that cannot work.
type Problem struct {
	Key     string // in study files
	Message string
}

// Check lists the settings of s that cannot work, with the reason.
func Check(s Spec) []Problem {
	var list []Problem
	add := func(key, message string) { list = append(list, Problem{key, message}) }
	if s.Min >= s.Max {
		add("min", "min must be below max")
	}
	if s.Scale == Log10 && s.Min <= 0 {
		add("min", "levels on a log10 scale must be above 0")
	}
	if s.MinTrials > s.MaxTrials {
		add("min_trials", "min_trials is above max_trials")
	}
	switch s.Method {
	case Constant:
		checkConstant(s, add)
	case Staircase:
		checkStaircase(s, add)
	case QuestPlus, Quest, Psi, PsiMarginal:
		checkQuestPlus(s, add)
		checkSecond(s, add)
	case Limits:
		checkLimits(s, add)
	}
	if s.Second != "" && !s.Method.Bayesian() {
		add("second_parameter", "only quest_plus, quest, psi and psi_marginal vary a second parameter")
	}
	return list
}

func checkConstant(s Spec, add func(key, message string)) {
	if len(s.Levels) == 0 {
		add("levels", "the method of constant stimuli needs levels")
	}
	if s.Repetition < 1 {
		add("repetitions", "give the number of trials per level")
	}
	for _, x := range s.Levels {
		if x < s.Min || x > s.Max {
			add("levels", number(x)+" is outside min to max")
		}
	}
}

func checkStaircase(s Spec, add func(key, message string)) {
	if len(s.StepsUp) == 0 {
		add("steps", "a staircase needs at least one step")
	}
	for _, step := range s.StepsUp {
		if step <= 0 {
			add("steps", "steps must be above 0")
		}
	}
	if s.Down > 1 && s.Up > 1 {
		add("up", "either up or down must be 1: with both above 1 the track has no single convergence point (Levitt 1971)")
	}
	if s.EasierIs == 0 {
		add("easier_is", "it is +1 or −1")
	}
	if s.Start < s.Min || s.Start > s.Max {
		add("start", "the first level "+number(s.Start)+" is outside min to max")
	}
	if s.Reversals > 0 && s.Discard >= s.Reversals {
		add("discard", "all reversals would be discarded")
	}
	// Mean movement is zero where p^down/(1−p^down) = up step/down step
	// (García-Pérez 1998); a target at or below guessing is never left.
	if target := Target(s); target <= s.Guess {
		add("step_ratio", "the track would converge at "+number(float64(100*target))+" % correct, which guessing reaches: use more right answers in a row (down) or a smaller step_ratio")
	} else if target > 0.99 {
		add("step_ratio", "the track would converge at "+number(float64(100*target))+" % correct, which lapses make unreachable: use fewer right answers in a row or a larger step_ratio")
	}
}

func checkQuestPlus(s Spec, add func(key, message string)) {
	if s.ThresholdMin >= s.ThresholdMax {
		add("threshold_min", "threshold_min must be below threshold_max")
	}
	if s.ThresholdMin <= 0 {
		add("threshold_min", "thresholds must be above 0, where the Weibull function begins: give threshold_min")
	}
	if s.ThresholdCount < 2 {
		add("threshold_count", "at least 2 thresholds are needed")
	}
	if s.LevelCount < 2 {
		add("level_count", "at least 2 levels are needed")
	}
	if len(s.Slopes) == 0 {
		add("slopes", "at least one slope is needed")
	}
	if len(s.Lapses) == 0 {
		add("lapses", "at least one lapse rate is needed")
	}
	if s.ThresholdMax < s.Min || s.ThresholdMin > s.Max {
		add("threshold_min", "no threshold considered lies within the levels from min to max")
	}
	for _, lapse := range s.Lapses {
		if lapse+s.Guess >= 1 {
			add("lapses", "guess and lapse together reach 1: the function would be flat")
		}
	}
	if s.Prior == Normal && (s.PriorMean < s.ThresholdMin || s.PriorMean > s.ThresholdMax) {
		add("prior_mean", "the likeliest threshold "+number(s.PriorMean)+" is outside threshold_min to threshold_max")
	}
	if s.KeepSlope && s.Method != PsiMarginal {
		add("keep_slope", "it belongs to method psi_marginal")
	}
	if s.StopEntropyBits > 0 && s.StopEntropyBits >= exact.Log(float64(s.ThresholdCount))/exact.Ln2 {
		add("stop_entropy_bits", "it would end at once: "+strconv.Itoa(s.ThresholdCount)+" thresholds have at most "+number(exact.Log(float64(s.ThresholdCount))/exact.Ln2)+" bits")
	}
	if cells := s.ThresholdCount * len(s.Slopes) * len(s.Lapses) * s.LevelCount * max(1, len(s.SecondLevels)) * max(1, len(s.Gradients)); cells > 4_000_000 {
		add("threshold_count", "thresholds × slopes × lapses × levels are "+strconv.Itoa(cells)+" cells: at most 4 000 000 keep a trial's update short")
	}
}

func checkSecond(s Spec, add func(key, message string)) {
	switch {
	case s.Second == "" && len(s.SecondLevels)+len(s.Gradients) > 0:
		add("second_parameter", "name the parameter that second_levels and gradients are about")
	case s.Second != "" && len(s.SecondLevels) < 2:
		add("second_levels", "at least 2 levels of "+s.Second+" are needed")
	case s.Second != "" && s.Second == s.Parameter:
		add("second_parameter", s.Second+" is varied already")
	}
	if rule, _ := s.rule(1); s.Second != "" && rule > Variance {
		add("place", "with a second parameter levels are chosen by entropy or variance: mode, mean and median do not say which of its levels comes next")
	}
}

func checkLimits(s Spec, add func(key, message string)) {
	if s.Reversals < 2 {
		add("reversals", "give the number of series, 2 or more")
	}
	if s.EasierIs == 0 {
		add("easier_is", "it is +1 or −1")
	}
	if len(s.StepsUp) != 1 || s.StepsUp[0] <= 0 {
		add("steps", "the method of limits needs one step above 0")
		return
	}
	if s.Scale == Log10 && s.Min <= 0 {
		return
	}
	if n := float64((onScale(s.Scale, s.Max) - onScale(s.Scale, s.Min)) / s.StepsUp[0]); n < 4 || n > 10000 {
		add("steps", number(n)+" steps fit between min and max: 4 to 10 000 make a series")
	}
}

func number(x float64) string { return strconv.FormatFloat(x, 'g', 5, 64) }
