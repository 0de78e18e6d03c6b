package psychometric

import (
	"math"

	"distal/experiments/random"
)

// binomial draws the number of successes in n trials of probability p by inversion, in
// pieces small enough for the probability of none not to underflow.
func binomial(s *random.Stream, n int, p float64) int {
	if p > 0.5 {
		return n - binomial(s, n, 1-p)
	}
	const piece = 500 // 0.5⁵⁰⁰ ≈ 3e−151
	k := 0
	for ; n > piece; n -= piece {
		k += invert1(s, piece, p)
	}
	return k + invert1(s, n, p)
}

func invert1(s *random.Stream, n int, p float64) int {
	u := s.Float64()
	ratio := p / (1 - p)
	mass := math.Pow(1-p, float64(n))
	k := 0
	for u > mass && k < n {
		u -= mass
		k++
		mass *= ratio * float64(n-k+1) / float64(k)
	}
	return k
}

// resampler draws new responses for a problem from probabilities that stay.
type resampler struct {
	p    *problem
	yes  []float64
	seed uint64
}

// draw sets the responses of sample i (0, 1, …): the same seed and i give the same sample.
func (r *resampler) draw(i int) {
	s := random.New(r.seed, uint32(i), random.PurposeBootstrap)
	for j, n := range r.p.n {
		r.p.k[j] = float64(binomial(&s, int(n), r.yes[j]))
	}
}

// copyWithResponses is the problem with responses of its own, which may be changed.
func (p *problem) copyWithResponses() *problem {
	q := *p
	q.k = append([]float64(nil), p.k...)
	q.steps = make([]candidate, len(p.z))
	q.start = startTable{}
	return &q
}
