package random_test

import (
	"math"
	"testing"

	"distal/experiments/random"
)

// Known answers of Philox4x32-10 from the kat_vectors file that Salmon et al.
// (2011) published with their generator; from memory.
func TestBlockKnownAnswers(t *testing.T) {
	t.Parallel()
	tests := []struct {
		counter [4]uint32
		key     [2]uint32
		expect  [4]uint32
	}{
		{[4]uint32{}, [2]uint32{}, [4]uint32{0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8}},
		{
			[4]uint32{0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff},
			[2]uint32{0xffffffff, 0xffffffff},
			[4]uint32{0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd},
		},
		{
			[4]uint32{0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344},
			[2]uint32{0xa4093822, 0x299f31d0},
			[4]uint32{0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1},
		},
	}
	for _, tt := range tests {
		if got := random.Block(tt.counter, tt.key); got != tt.expect {
			t.Errorf("Block(%x, %x) = %x, want %x", tt.counter, tt.key, got, tt.expect)
		}
	}
}

func TestStreamsAreSeparate(t *testing.T) {
	t.Parallel()
	noise := random.New(7, 3, random.PurposeNoise)
	first := noise.Uint64()
	dots := random.New(7, 3, random.PurposeDots)
	for range 1000 {
		dots.Float64()
	}
	again := random.New(7, 3, random.PurposeNoise)
	if again.Uint64() != first {
		t.Error("drawing from one stream shifted another")
	}
	seen := map[uint64]bool{}
	for trial := range uint32(20) {
		for p := random.PurposeOrder; p <= random.PurposeBootstrap; p++ {
			for sub := range uint32(3) {
				s := random.NewSub(7, trial, p, sub)
				seen[s.Uint64()] = true
			}
		}
	}
	if want := 20 * 16 * 3; len(seen) != want {
		t.Errorf("%d different first numbers of %d streams", len(seen), want)
	}
}

// The bounds are 5 standard errors for fixed seeds.
func TestDistributions(t *testing.T) {
	t.Parallel()
	const n = 200_000
	s := random.New(11, 0, random.PurposeObserver)
	var sum, square, lag, last float64
	for range n {
		x := s.Normal()
		sum += x
		square += x * x
		lag += x * last
		last = x
	}
	if math.Abs(sum/n) > 5/math.Sqrt(n) || math.Abs(square/n-1) > 5*math.Sqrt(2.0/n) || math.Abs(lag/n) > 5/math.Sqrt(n) {
		t.Errorf("normal: mean %v, variance %v, lag-1 %v", sum/n, square/n, lag/n)
	}
	counts := make([]int, 7)
	for range n {
		counts[s.Intn(7)]++
	}
	chi := 0.0
	for _, c := range counts {
		d := float64(c) - n/7.0
		chi += d * d / (n / 7.0)
	}
	if chi > 22.46 { // 0.999 quantile of chi-square with 6 degrees of freedom (handbook tables)
		t.Errorf("Intn(7): chi-square %v with 6 degrees of freedom, counts %v", chi, counts)
	}
}

func TestNothingAllocates(t *testing.T) {
	s := random.New(1, 2, random.PurposeDots)
	if n := testing.AllocsPerRun(100, func() { s.Normal(); s.Intn(5); s.Float64() }); n != 0 {
		t.Errorf("%v allocations", n)
	}
}
