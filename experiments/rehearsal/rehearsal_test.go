package rehearsal_test

import (
	"math"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
)

func readStudy(t testing.TB, name string) *study.Study {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return s
}

func observe(t testing.TB, s *study.Study, seed uint64, o rehearsal.Observer, screen rehearsal.Screen) []run.Record {
	t.Helper()
	records, err := rehearsal.Observe(s, run.Assignment{Seed: seed}, o, screen, "d", 1.7e12)
	if err != nil {
		t.Fatal(err)
	}
	return records
}

// quick is the usual screen without frames, for where levels alone matter.
func quick() rehearsal.Screen {
	screen := rehearsal.DefaultScreen()
	screen.SkipDisplays = true
	return screen
}

// tally compares a share with what is expected of independent trials.
type tally struct{ got, want, variance, n float64 }

func (c *tally) add(hit bool, p float64) {
	if hit {
		c.got++
	}
	c.want += p
	c.variance += float64(p * (1 - p))
	c.n++
}

// check fails beyond five standard deviations.
func (c *tally) check(t *testing.T, what string) {
	t.Helper()
	if c.n < 100 {
		t.Errorf("%s: only %g trials", what, c.n)
	}
	if math.Abs(c.got-c.want) > 5*math.Sqrt(c.variance)+1e-9 {
		t.Errorf("%s: %g of %g trials, want %.1f ± %.1f", what, c.got, c.n, c.want, math.Sqrt(c.variance))
	}
}

// Observers answer as their psychometric function says, in each condition and
// wherever the procedure puts its levels.
func TestObserversFollowTheirFunction(t *testing.T) {
	t.Parallel()
	for name, o := range map[string]rehearsal.Observer{
		"plain":  {Threshold: 0.2, Slope: 2},
		"lapses": {Threshold: 0.3, Slope: 1.5, Lapse: 0.08},
		"drift":  {Threshold: 0.15, Slope: 3, Drift: 0.3},
	} {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			s := readStudy(t, "motion-coherence")
			var below, above, catch tally
			for seed := range uint64(60) {
				trials := 0
				for _, rec := range observe(t, s, seed, o, quick()) {
					if rec.Kind != run.KindTrial {
						continue
					}
					right := rec.Trial.Correct == 1
					threshold := o.Threshold * math.Pow(10, o.Drift*float64(trials)/100)
					trials++
					if math.IsNaN(rec.Trial.Level) {
						catch.add(right, 1-o.Lapse)
						continue
					}
					p := 0.5 + float64((0.5-o.Lapse)*(1-math.Exp(-math.Pow(rec.Trial.Level/threshold, o.Slope))))
					if rec.Trial.Level < threshold {
						below.add(right, p)
					} else {
						above.add(right, p)
					}
				}
			}
			below.check(t, "below threshold")
			above.check(t, "above threshold")
			catch.check(t, "practice and catch trials")
		})
	}
}

// Inverted walkers need twice the turn of upright ones when the observer says so.
func TestConditionsScaleTheThreshold(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "walking-direction")
	o := rehearsal.Observer{Threshold: 12, Slope: 2, Lapse: 0.02, Conditions: map[string]float64{"inverted": 2}}
	tallies := map[string]*tally{"upright": {}, "inverted": {}}
	for seed := range uint64(40) {
		for _, rec := range observe(t, s, seed, o, quick()) {
			if rec.Kind != run.KindTrial || math.IsNaN(rec.Trial.Level) {
				continue
			}
			threshold := 12.0
			if rec.Trial.Condition == "inverted" {
				threshold = 24
			}
			p := 0.5 + float64(0.48*(1-math.Exp(-math.Pow(rec.Trial.Level/threshold, 2))))
			tallies[rec.Trial.Condition].add(rec.Trial.Correct == 1, p)
		}
	}
	for name, c := range tallies {
		c.check(t, name)
	}
}

// Fast guesses are as frequent as asked for, before 150 ms, and right half of the time.
func TestFastGuesses(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "motion-coherence")
	for i := range s.Tasks {
		s.Tasks[i].RespondDuring = true
	}
	o := rehearsal.Observer{Threshold: 0.02, Slope: 4, FastGuess: 0.2}
	var share, right tally
	for seed := range uint64(60) {
		for _, rec := range observe(t, s, seed, o, quick()) {
			if rec.Kind != run.KindTrial {
				continue
			}
			fast := rec.Trial.ResponseMs < 150
			share.add(fast, 0.2)
			if fast {
				right.add(rec.Trial.Correct == 1, 0.5)
			} else if rec.Trial.ResponseMs < 250 {
				t.Fatalf("a considered answer after %g ms", rec.Trial.ResponseMs)
			}
		}
	}
	share.check(t, "fast guesses")
	right.check(t, "right fast guesses")
}

// One who sees nothing guesses the first choice as often as the side bias says:
// b + (1 − b)/2.
func TestSideBias(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "walking-direction")
	for _, bias := range []float64{0, 0.4} {
		var first tally
		for seed := range uint64(20) {
			for _, rec := range observe(t, s, seed, rehearsal.Observer{Threshold: 12, Slope: 2, Lapse: 0.5, SideBias: bias}, quick()) {
				if rec.Kind == run.KindTrial {
					first.add(rec.Trial.Response == s.Tasks[0].Choices[0].Name, bias+float64((1-bias)/2))
				}
			}
		}
		first.check(t, "first choice")
	}
}

// Refreshes are missed as often as the screen says, and the records say so.
func TestDroppedFrames(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "motion-coherence")
	screen := quick()
	screen.DropRate = 0.04
	var dropped tally
	for seed := range uint64(10) {
		for _, rec := range observe(t, s, seed, rehearsal.Observer{Threshold: 0.2, Slope: 2}, screen) {
			if rec.Kind != run.KindTrial {
				continue
			}
			late, total := 0, 0
			for i, n := range rec.Trial.Steps {
				total += n
				// The last interval of the stimulus cannot be late.
				if total < rec.Trial.StimulusSteps || n == 2 {
					dropped.add(n == 2, 0.04)
				}
				late += n - 1
				if got := rec.Trial.IntervalsMs[i]; math.Abs(got-float64(n)*screen.RefreshMs) > 8*screen.JitterMs {
					t.Fatalf("%d refresh intervals in %g ms", n, got)
				}
			}
			if late != rec.Trial.Dropped || total != rec.Trial.StimulusSteps {
				t.Fatalf("%d dropped of %d intervals: %+v", late, total, rec.Trial)
			}
		}
	}
	dropped.check(t, "late frames")
}

// The same seed gives the same records; another seed or observer others. Leaving
// frames out changes digests alone.
func TestRehearsalIsDeterministic(t *testing.T) {
	t.Parallel()
	for _, name := range library.Names() {
		s := readStudy(t, name)
		o := rehearsal.Observer{Threshold: 0.3, Slope: 2, SideBias: 0.2, FastGuess: 0.05}
		full := observe(t, s, 9, o, rehearsal.DefaultScreen())
		if diff := cmp.Diff(full, observe(t, s, 9, o, rehearsal.DefaultScreen()), cmpopts.EquateNaNs()); diff != "" {
			t.Errorf("%s: %s", name, diff)
		}
		if cmp.Equal(full, observe(t, s, 10, o, rehearsal.DefaultScreen()), cmpopts.EquateNaNs()) {
			t.Errorf("%s: another seed gives the same run", name)
		}
		digests := cmpopts.IgnoreFields(run.TrialRecord{}, "Digest")
		if diff := cmp.Diff(full, observe(t, s, 9, o, quick()), cmpopts.EquateNaNs(), digests); diff != "" {
			t.Errorf("%s without frames: %s", name, diff)
		}
		if !slices.IsSortedFunc(full, func(a, b run.Record) int { return int(a.AtMs - b.AtMs) }) {
			t.Errorf("%s: the clock runs backwards", name)
		}
	}
}

// A person or screen that does not suit ends in a refusal that says where and why.
func TestRefusals(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "motion-coherence")
	good := rehearsal.Observer{Threshold: 0.2, Slope: 2}
	for _, c := range []struct {
		name         string
		observer     rehearsal.Observer
		screen       func(*rehearsal.Screen)
		step, reason string
	}{
		{"a child", rehearsal.Observer{Threshold: 0.2, Slope: 2, AgeYears: 12}, nil, "screening", run.ReasonAge},
		{"30 Hz", good, func(s *rehearsal.Screen) { s.RefreshMs = 1000.0 / 30 }, "display_check", run.ReasonRefreshLow},
		{"a small screen", good, func(s *rehearsal.Screen) { s.WidthPx = 200 }, "display_check", run.ReasonFieldSmall},
		{"across the room", good, func(s *rehearsal.Screen) { s.DistanceMm = 4000 }, "distance", run.ReasonDistance},
		{"no real screen", good, func(s *rehearsal.Screen) { s.PxPerMm = 1 }, "card", run.ReasonCardDensity},
		{"someone who sees nothing", rehearsal.Observer{Threshold: 1, Slope: 1, Lapse: 0.5}, nil, "trial", run.ReasonPractice},
	} {
		screen := quick()
		if c.screen != nil {
			c.screen(&screen)
		}
		seeds := uint64(1)
		if c.reason == run.ReasonPractice {
			seeds = 8 // guessing can meet the criterion
		}
		refused := false
		for seed := range seeds {
			records := observe(t, s, seed, c.observer, screen)
			last := records[len(records)-1]
			if last.Kind == run.KindRefusal {
				refused = true
				if last.Refusal.Step != c.step || last.Refusal.Reason != c.reason {
					t.Errorf("%s: refused at %s because of %s", c.name, last.Refusal.Step, last.Refusal.Reason)
				}
			}
		}
		if !refused {
			t.Errorf("%s was not refused", c.name)
		}
	}
}

// A run with and without frames. Ten thousand runs in a minute are 6 ms each.
func BenchmarkRun(b *testing.B) {
	for _, name := range library.Names() {
		for _, skip := range []bool{true, false} {
			label := name + "/frames"
			if skip {
				label = name + "/levels"
			}
			b.Run(label, func(b *testing.B) {
				s := readStudy(b, name)
				screen := rehearsal.DefaultScreen()
				screen.SkipDisplays = skip
				trials, seed := 0, uint64(0)
				for b.Loop() {
					seed++
					for _, rec := range observe(b, s, seed, rehearsal.Observer{Threshold: 0.2, Slope: 2}, screen) {
						if rec.Kind == run.KindTrial {
							trials++
						}
					}
				}
				b.ReportMetric(float64(trials)/float64(b.N), "trials/run")
			})
		}
	}
}
