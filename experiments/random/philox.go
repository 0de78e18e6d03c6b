// Package random is the one source of randomness of the engine: the
// counter-based generator Philox4x32-10 (Salmon JK, Moraes MA, Dror RO, Shaw DE
// 2011, Parallel random numbers: as easy as 1, 2, 3, SC11,
// doi:10.1145/2063384.2063405).
//
// The key is the run's 64-bit seed. The 128-bit counter is
//
//	word 0: position in the stream (blocks of four 32-bit numbers)
//	word 1: trial number in the run
//	word 2: purpose
//	word 3: sub-stream (place, track, copy …)
//
// so every trial and purpose has a stream of its own, and drawing more from
// one never shifts another.
package random

import (
	"math"

	"distal/experiments/exact"
)

// Purpose selects a stream. The numbers are part of the format: a replay needs them.
type Purpose uint32

// Purposes.
const (
	PurposeOrder      Purpose = 1 // of blocks, balanced values, tracks
	PurposeCatch      Purpose = 2
	PurposeProcedure  Purpose = 3
	PurposeJitter     Purpose = 4 // of fixation
	PurposeDots       Purpose = 5 // starting positions and re-entry
	PurposeSignal     Purpose = 6 // which dots carry the signal
	PurposeNoise      Purpose = 7 // noise directions and positions
	PurposeLifetime   Purpose = 8
	PurposePolarity   Purpose = 9
	PurposeMask       Purpose = 10
	PurposeScramble   Purpose = 11
	PurposePhase      Purpose = 12
	PurposeObserver   Purpose = 13 // simulated observers
	PurposeScreen     Purpose = 14 // simulated screens
	PurposeAllocation Purpose = 15
	PurposeBootstrap  Purpose = 16
)

// Stream is one stream of random numbers. It is a value without pointers; the
// zero Stream is not valid.
type Stream struct {
	key     [2]uint32
	counter [4]uint32
	out     [4]uint32
	left    int
}

// New is the stream of a trial for a purpose.
func New(seed uint64, trial uint32, p Purpose) Stream { return NewSub(seed, trial, p, 0) }

// NewSub is one of several streams of a trial for a purpose.
func NewSub(seed uint64, trial uint32, p Purpose, sub uint32) Stream {
	return Stream{
		key:     [2]uint32{uint32(seed), uint32(seed >> 32)},
		counter: [4]uint32{0, trial, uint32(p), sub},
	}
}

// Block is the Philox4x32-10 bijection of counter under key.
func Block(counter [4]uint32, key [2]uint32) [4]uint32 {
	const (
		m0, m1 = 0xD2511F53, 0xCD9E8D57
		w0, w1 = 0x9E3779B9, 0xBB67AE85
	)
	for range 10 {
		p0 := m0 * uint64(counter[0])
		p1 := m1 * uint64(counter[2])
		counter = [4]uint32{
			uint32(p1>>32) ^ counter[1] ^ key[0], uint32(p1),
			uint32(p0>>32) ^ counter[3] ^ key[1], uint32(p0),
		}
		key[0] += w0
		key[1] += w1
	}
	return counter
}

// Uint32 is uniform over all 32-bit numbers.
func (s *Stream) Uint32() uint32 {
	if s.left == 0 {
		s.out = Block(s.counter, s.key)
		s.counter[0]++
		s.left = 4
	}
	s.left--
	return s.out[3-s.left]
}

// Uint64 is uniform over all 64-bit numbers: the first draw is the low half.
func (s *Stream) Uint64() uint64 {
	low := uint64(s.Uint32())
	return uint64(s.Uint32())<<32 | low
}

// Float64 is uniform over the multiples of 2⁻⁵³ in [0, 1).
func (s *Stream) Float64() float64 { return float64(float64(s.Uint64()>>11) * 0x1p-53) }

// Range is uniform in [low, high).
func (s *Stream) Range(low, high float64) float64 { return low + float64((high-low)*s.Float64()) }

// Intn is uniform over 0 … n−1, without bias (Lemire D 2019, Fast random integer
// generation in an interval, ACM Trans Model Comput Simul 29:3). n must be positive.
func (s *Stream) Intn(n int) int {
	if n <= 0 || n > math.MaxInt32 {
		panic("random: Intn needs 1 ≤ n < 2³¹")
	}
	bound := uint32(n)
	product := uint64(s.Uint32()) * uint64(bound)
	if low := uint32(product); low < bound {
		for threshold := -bound % bound; low < threshold; low = uint32(product) {
			product = uint64(s.Uint32()) * uint64(bound)
		}
	}
	return int(product >> 32)
}

// Bool is true in half of the draws.
func (s *Stream) Bool() bool { return s.Uint32()&1 == 1 }

// Normal is standard normal, by the polar form of Box and Muller (Marsaglia and
// Bray 1964, SIAM Rev 6:260); the second deviate is dropped to keep the stream simple.
func (s *Stream) Normal() float64 {
	for {
		u := float64(2*s.Float64()) - 1
		v := float64(2*s.Float64()) - 1
		q := float64(u*u) + float64(v*v)
		if q > 0 && q < 1 {
			return float64(u * math.Sqrt(-2*exact.Log(q)/q))
		}
	}
}

// Exponential has mean 1.
func (s *Stream) Exponential() float64 { return -exact.Log(1 - s.Float64()) }

// Perm fills p with a random order of 0 … len(p)−1 (Fisher and Yates).
func (s *Stream) Perm(p []int) {
	for i := range p {
		p[i] = i
	}
	s.Shuffle(p)
}

// Shuffle puts p in random order.
func (s *Stream) Shuffle(p []int) {
	for i := len(p) - 1; i > 0; i-- {
		j := s.Intn(i + 1)
		p[i], p[j] = p[j], p[i]
	}
}
