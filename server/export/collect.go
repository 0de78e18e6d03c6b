package export

import (
	"context"
	"fmt"
	"slices"
	"time"

	"github.com/google/uuid"

	"distal/server/bundle"
	"distal/server/store"
)

// Collect gathers a study's data set from the store: the human runs, or with
// simulated the simulated ones, never both. Withdrawn runs are not in it.
func Collect(ctx context.Context, s *store.Store, lab, id uuid.UUID, simulated bool, now time.Time) (*DataSet, error) {
	stored, err := s.FindStudy(ctx, lab, id)
	if err != nil {
		return nil, err
	}
	runs, err := s.FindRuns(ctx, lab, id)
	if err != nil {
		return nil, err
	}
	_, keys, err := s.FindKeys(ctx, lab)
	if err != nil {
		return nil, err
	}
	d := &DataSet{Keys: keys, Simulated: simulated, WrittenAt: now}
	digests := []string{stored.Bundle}
	labels := map[uuid.UUID]string{}
	slices.Reverse(runs) // oldest first
	for _, r := range runs {
		if r.Simulated != simulated || r.Outcome == store.OutcomeWithdrawn {
			continue
		}
		records, err := s.FindRecords(ctx, lab, r.ID)
		if err != nil {
			return nil, err
		}
		label := fmt.Sprintf("run-%04d", len(d.Runs)+1)
		labels[r.ID] = label
		d.Runs = append(d.Runs, Run{
			Label: label, Seed: r.Seed, Group: r.Group, Order: r.Order, Simulated: r.Simulated, Bundle: r.Bundle, Outcome: r.Outcome,
			Excluded: r.Excluded, StartedAt: r.StartedAt, Browser: r.Browser, Records: records,
		})
		if !slices.Contains(digests, r.Bundle) {
			digests = append(digests, r.Bundle)
		}
	}
	for _, digest := range digests {
		_, signed, err := s.FindBundle(ctx, digest)
		if err != nil {
			return nil, err
		}
		d.Bundles = append(d.Bundles, signed)
	}
	b, err := bundle.Open([]byte(d.Bundles[0].Bundle))
	if err != nil {
		return nil, err
	}
	d.Study = b.Study
	decisions, err := s.FindExclusions(ctx, lab, id)
	if err != nil {
		return nil, err
	}
	for _, e := range decisions {
		if label, ok := labels[e.Run]; ok {
			by := e.Person
			if e.Rule != "" {
				by = "the study's rules"
			}
			d.Exclusions = append(d.Exclusions, Exclusion{label, e.Excluded, e.Rule, e.Reason, by, e.DecidedAt})
		}
	}
	return d, nil
}
