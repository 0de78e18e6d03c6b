package procedure

import "distal/experiments/random"

// constant is the method of constant stimuli: every level Repetition times, in
// shuffled order within successive sets of all levels, so that levels stay
// balanced at every moment.
type constant struct {
	spec   Spec
	order  []int
	trials int
	level  [1]float64
}

func newConstant(s Spec, stream *random.Stream) *constant {
	c := &constant{spec: s}
	set := make([]int, len(s.Levels))
	for range s.Repetition {
		stream.Perm(set)
		c.order = append(c.order, set...)
	}
	return c
}

func (c *constant) Next() ([]float64, bool) {
	if c.trials >= len(c.order) {
		return c.level[:], false
	}
	c.level[0] = c.spec.Levels[c.order[c.trials]]
	return c.level[:], true
}

func (c *constant) Record(int) { c.trials++ }

// Postpone moves the level of the next trial to the end of the track: its trial
// did not count.
func (c *constant) Postpone() {
	if c.trials < len(c.order) {
		level := c.order[c.trials]
		copy(c.order[c.trials:], c.order[c.trials+1:])
		c.order[len(c.order)-1] = level
	}
}

func (c *constant) Trials() int { return c.trials }

func (c *constant) Progress() float64 { return min(1, float64(c.trials)/float64(max(1, len(c.order)))) }

func (c *constant) Estimate() Estimate {
	return Estimate{Reason: "the method of constant stimuli has no estimate of its own: fit the data"}
}
