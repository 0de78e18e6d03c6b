package store_test

import (
	"context"
	"testing"

	"distal/experiments/run"
)

// Uploads of one trial each, by 64 runs at once, each acknowledged after a
// synchronous commit.
func BenchmarkAppendOneTrial(b *testing.B) {
	f := setup(b)
	b.SetParallelism(32) // times GOMAXPROCS
	b.ReportAllocs()
	b.RunParallel(func(pb *testing.PB) {
		r, err := f.store.CreateRun(context.Background(), f.lab, f.newRun(), f.spec, f.consent())
		if err == nil {
			_, err = f.store.Append(context.Background(), f.lab, r.ID, f.preparation())
		}
		for i := 0; err == nil && pb.Next(); i++ {
			_, err = f.store.Append(context.Background(), f.lab, r.ID, []run.Record{f.trial(7+i, i)})
		}
		if err != nil {
			b.Error(err)
		}
	})
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "uploads/s")
}

// One run that uploads alone: the waiting time of a participant.
func BenchmarkAppendAlone(b *testing.B) {
	f := setup(b)
	r := f.begin()
	f.append(r.ID, 6, f.preparation()...)
	i := 0
	for b.Loop() {
		f.append(r.ID, 7+i, f.trial(7+i, i))
		i++
	}
}
