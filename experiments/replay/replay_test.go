package replay_test

import (
	"testing"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/replay"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

func readStudy(t testing.TB, name string) *study.Study {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return s
}

func rehearse(t testing.TB, s *study.Study, seed uint64) []run.Record {
	t.Helper()
	o := rehearsal.Observer{Threshold: 0.2, Slope: 2, Lapse: 0.01}
	if s.About.Name == "walking-direction" {
		o = rehearsal.Observer{Threshold: 12, Slope: 2, Lapse: 0.01, Conditions: map[string]float64{"inverted": 2}}
	}
	screen := rehearsal.DefaultScreen()
	screen.DropRate = 0.01
	records, err := rehearsal.Observe(s, run.Assignment{Seed: seed}, o, screen, "digest", 1.7e12)
	if err != nil {
		t.Fatal(err)
	}
	return records
}

// Whole runs of every library study, through their wire form, are re-created
// bit for bit; a changed level, response, frame or digest is found.
func TestRehearsedRunsReplay(t *testing.T) {
	t.Parallel()
	for _, name := range library.Names() {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			s := readStudy(t, name)
			for seed := range uint64(4) {
				records := throughWire(t, rehearse(t, s, seed+1))
				report := replay.Verify(s, run.Assignment{Seed: seed + 1}, records)
				// Adjustments and after-effects last longer and are fewer.
				if !report.OK() || report.Trials < 8 || frames(records) < 700 || report.Outcome != run.StepDone {
					t.Fatalf("seed %d: %+v", seed+1, report)
				}
			}
		})
	}
}

// frames is the number of stimulus frames presented in a run.
func frames(records []run.Record) int {
	n := 0
	for i := range records {
		if t := records[i].Trial; t != nil {
			n += len(t.Steps)
		}
	}
	return n
}

func throughWire(t testing.TB, records []run.Record) []run.Record {
	t.Helper()
	out := make([]run.Record, len(records))
	for i := range records {
		text, err := value.Canonical(records[i].Encode())
		if err != nil {
			t.Fatal(err)
		}
		tree, err := value.ParseJSON(text)
		if err != nil {
			t.Fatal(err)
		}
		rec, err := run.DecodeRecord(tree)
		if err != nil {
			t.Fatalf("record %d: %v\n%s", records[i].Sequence, err, text)
		}
		out[i] = *rec
	}
	return out
}

func TestChangesAreFound(t *testing.T) {
	t.Parallel()
	s := readStudy(t, "motion-coherence")
	changes := map[string]func(*run.TrialRecord){
		"Level":    func(r *run.TrialRecord) { r.Level *= 1 + 1e-15 },
		"Response": func(r *run.TrialRecord) { r.Response = map[string]string{"left": "right", "right": "left"}[r.Response] },
		"Steps":    func(r *run.TrialRecord) { r.Steps[3] = 2 },
		"Digest":   func(r *run.TrialRecord) { r.Digest = "0123456789abcdef" },
		"Number":   func(r *run.TrialRecord) { r.Trial++ },
		"Values":   func(r *run.TrialRecord) { r.Values[0]++ },
		"Truths":   func(r *run.TrialRecord) { r.Truths = append([]float64{r.Truths[0] + 1}, r.Truths[1:]...) },
		"Refresh":  func(r *run.TrialRecord) { r.RefreshMs *= 1.001 },
	}
	for name, change := range changes {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			records := rehearse(t, s, 3)
			n := 0
			for i := range records {
				if records[i].Kind != run.KindTrial || records[i].Trial.Track < 0 {
					continue
				}
				if n++; n == 10 {
					trial := *records[i].Trial
					trial.Values = append([]float64(nil), trial.Values...)
					change(&trial)
					records[i].Trial = &trial
				}
			}
			if report := replay.Verify(s, run.Assignment{Seed: 3}, records); report.OK() {
				t.Errorf("the change was not found: %+v", report)
			}
		})
	}
	if report := replay.Verify(s, run.Assignment{Seed: 4}, rehearse(t, s, 3)); report.OK() {
		t.Error("another seed was not found")
	}
}
