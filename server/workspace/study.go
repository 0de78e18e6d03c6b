package workspace

import (
	"fmt"
	"math"
	"net/http"
	"slices"
	"strconv"

	"github.com/labstack/echo/v4"

	"distal/experiments/library"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/access"
	"distal/server/export"
	"distal/server/quality"
	"distal/server/site"
	"distal/server/store"
	"distal/web/pages"
)

func (s *Service) studies(c echo.Context, w who) error {
	list, err := s.Store.FindStudies(c.Request().Context(), w.lab)
	if err != nil {
		return err
	}
	m := pages.StudiesModel{Frame: s.frame("Studies", w)}
	for _, st := range list {
		m.Studies = append(m.Studies, studyRow(st))
	}
	return s.render(c, http.StatusOK, pages.Studies(m))
}

func studyRow(st store.Study) pages.StudyRow {
	quota := "no limit"
	if st.Quota > 0 {
		quota = strconv.Itoa(st.Quota)
	}
	return pages.StudyRow{
		ID: st.ID.String(), Title: st.Title, Name: st.Name, State: st.State, Quota: quota, Launched: st.CreatedAt.UTC().Format("2 January 2006"),
		Valid: st.Valid(), Running: st.Running, Excluded: st.Excluded, Refused: st.Refused, Withdrawn: st.Withdrawn,
		Incomplete: st.Incomplete, Simulated: st.Simulated,
	}
}

func (s *Service) library(c echo.Context, w who) error {
	m := pages.LibraryModel{Frame: s.frame("Library", w)}
	for _, name := range library.Names() {
		st, problems := library.Read(name)
		if problems.Failed() {
			return problems
		}
		e := pages.LibraryEntry{Name: name, Title: st.About.Title, Description: st.About.Description, Minutes: fmt.Sprintf("%g", st.About.Minutes)}
		for i := range st.Displays {
			e.Displays = append(e.Displays, st.Displays[i].Kind.Doc)
		}
		m.Entries = append(m.Entries, e)
	}
	return s.render(c, http.StatusOK, pages.Library(m))
}

func (s *Service) launch(c echo.Context, w who) error {
	name := c.Param("name")
	if !slices.Contains(library.Names(), name) {
		return store.ErrNotFound
	}
	st, problems := library.Read(name)
	if problems.Failed() {
		return problems
	}
	id, err := s.Launch(c.Request().Context(), w.lab, w.person.ID, st)
	if err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/studies/"+id.String())
}

func (s *Service) setState(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	state := c.FormValue("state")
	if state != store.StateOpen && state != store.StatePaused && state != store.StateClosed {
		return site.NewProblem(http.StatusUnprocessableEntity, "state", "a study can be open, paused or closed")
	}
	if err := s.Store.SetStudyState(c.Request().Context(), w.lab, w.person.ID, id, state); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/studies/"+id.String())
}

func (s *Service) setQuota(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	quota, err := strconv.Atoi(c.FormValue("quota"))
	if err != nil || quota < 0 || quota > 100000 {
		return site.NewProblem(http.StatusUnprocessableEntity, "quota", "the quota is a whole number from 0 (no limit) to 100000")
	}
	if err := s.Store.SetStudyQuota(c.Request().Context(), w.lab, w.person.ID, id, quota); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/studies/"+id.String())
}

func (s *Service) invite(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	n, err := strconv.Atoi(c.FormValue("number"))
	if err != nil || n < 1 || n > 200 {
		return site.NewProblem(http.StatusUnprocessableEntity, "number", "from 1 to 200 invitations can be made at a time")
	}
	if _, err := s.Store.CreateInvitations(c.Request().Context(), w.lab, w.person.ID, id, c.FormValue("label"), n); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/studies/"+id.String()+"#invitations")
}

func (s *Service) revokeInvitation(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	ctx := c.Request().Context()
	invitation, err := s.Store.FindInvitation(ctx, w.lab, id)
	if err != nil {
		return err
	}
	if err := s.Store.RevokeInvitation(ctx, w.lab, w.person.ID, id); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/studies/"+invitation.Study.String()+"#invitations")
}

func (s *Service) download(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	simulated := c.QueryParam("simulated") == "true"
	d, err := export.Collect(c.Request().Context(), s.Store, w.lab, id, simulated, s.Now())
	if err != nil {
		return err
	}
	name := d.Study.About.Name
	if simulated {
		name += "-simulated"
	}
	c.Response().Header().Set("Content-Type", "application/zip")
	c.Response().Header().Set("Content-Disposition", fmt.Sprintf("attachment; filename=%q", name+".zip"))
	return export.Write(c.Response(), d)
}

func (s *Service) study(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	ctx := c.Request().Context()
	st, err := s.Store.FindStudy(ctx, w.lab, id)
	if err != nil {
		return err
	}
	m := pages.StudyModel{Frame: s.frame(st.Title, w), Study: studyRow(st), Link: s.Origin + "/s/" + st.Link, Bundle: st.Bundle}
	if st.Bundle != "" {
		b, err := s.OpenBundle(ctx, st.Bundle)
		if err != nil {
			return err
		}
		for _, rule := range b.Study.Exclusions {
			m.Rules = append(m.Rules, pages.Rule{Name: rule.Name, When: rule.When, Reason: rule.Reason})
		}
		if err := s.fillRuns(c, w, st, b.Study, &m); err != nil {
			return err
		}
	}
	invitations, err := s.Store.FindInvitations(ctx, w.lab, id)
	if err != nil {
		return err
	}
	for _, i := range invitations {
		state := "open"
		switch {
		case i.Used:
			state = "used"
		case i.Revoked:
			state = "revoked"
		}
		token, _, err := s.Tokens.Issue(ctx, access.AudienceInvitation, w.lab, id, i.ID)
		if err != nil {
			return err
		}
		m.Invitations = append(m.Invitations, pages.InvitationRow{ID: i.ID.String(), Label: i.Label, State: state, Link: s.Origin + "/i/" + token})
	}
	return s.render(c, http.StatusOK, pages.Study(m))
}

// stageNames are the steps of a run by the rank of its furthest record.
var stageNames = []string{"arrival", "consent", "cautions", "card", "distance", "display check", "instructions", "trials", "questions", "end"}

func (s *Service) fillRuns(c echo.Context, w who, st store.Study, spec *study.Study, m *pages.StudyModel) error {
	ctx := c.Request().Context()
	runs, err := s.Store.FindRuns(ctx, w.lab, st.ID)
	if err != nil {
		return err
	}
	m.Funnel = funnel(runs)
	groups := map[string]*pages.ThresholdPlot{}
	var order []string
	for _, r := range runs {
		if r.Outcome == store.OutcomeWithdrawn {
			continue
		}
		records, err := s.Store.FindRecords(ctx, w.lab, r.ID)
		if err != nil {
			return err
		}
		measures := quality.Measure(records)
		row := runRow(r, measures)
		for _, t := range quality.Thresholds(spec, records) {
			name := t.Block
			if t.Condition != "" {
				name = t.Condition
			}
			row.Thresholds = append(row.Thresholds, thresholdText(t))
			g := groups[name]
			if g == nil {
				g = &pages.ThresholdPlot{Name: name, Parameter: t.Parameter, Unit: t.Unit, Linear: t.Linear}
				groups[name] = g
				order = append(order, name)
			}
			if t.Known && r.Outcome == store.OutcomeCompleted {
				g.Add(pages.ThresholdItem{
					Run: row.ID, Value: t.Threshold, Low: t.Low, High: t.High, OnScale: t.OnScale, SE: t.SE, Excluded: r.Excluded, Simulated: r.Simulated,
				})
			}
		}
		m.Runs = append(m.Runs, row)
		if hz := measures.Value("refresh_hz"); !math.IsNaN(hz) {
			m.RefreshHz = append(m.RefreshHz, hz)
		}
	}
	for _, name := range order {
		m.Plots = append(m.Plots, *groups[name])
		m.ThresholdNames = append(m.ThresholdNames, name)
	}
	return nil
}

func funnel(runs []store.Run) []pages.FunnelStep {
	reached := make([]int, len(stageNames))
	total := 0
	for _, r := range runs {
		if r.Outcome == store.OutcomeWithdrawn {
			continue
		}
		total++
		for i := 1; i <= min(r.Stage, len(stageNames)-1); i++ {
			reached[i]++
		}
	}
	var steps []pages.FunnelStep
	for i := 1; i < len(stageNames); i++ {
		share := 0.0
		if total > 0 {
			share = float64(reached[i]) / float64(total)
		}
		steps = append(steps, pages.FunnelStep{Name: stageNames[i], Count: reached[i], Share: share})
	}
	return steps
}

func runRow(r store.Run, m quality.Measures) pages.RunRow {
	state := r.Outcome
	if state == "" {
		state = "at " + stageNames[min(r.Stage, len(stageNames)-1)]
	}
	return pages.RunRow{
		ID: r.ID.String(), Started: r.StartedAt.UTC().Format("2006-01-02 15:04"), State: state, Simulated: r.Simulated, Excluded: r.Excluded,
		Trials: r.Trials, Refresh: text(m.Value("refresh_hz"), 1), Dropped: text(m.Value("dropped_percent"), 2),
		Catch: percent(m.Value("catch_accuracy")), MedianRT: text(m.Value("median_rt_ms"), 0), Browser: r.Browser,
	}
}

// text is a number with so many decimals, a dash for NaN.
func text(x float64, decimals int) string {
	if math.IsNaN(x) {
		return "–"
	}
	return strconv.FormatFloat(x, 'f', decimals, 64)
}

func percent(x float64) string {
	if math.IsNaN(x) {
		return "–"
	}
	return strconv.FormatFloat(100*x, 'f', 0, 64)
}

func thresholdText(t quality.Threshold) string {
	if !t.Known {
		return "–"
	}
	low, high := fmt.Sprintf("%.3g", t.Low), fmt.Sprintf("%.3g", t.High)
	if math.IsInf(t.High, 1) {
		high = "open"
	}
	return fmt.Sprintf("%.3g [%s, %s]", t.Threshold, low, high)
}

func (s *Service) run(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	ctx := c.Request().Context()
	r, err := s.Store.FindRun(ctx, w.lab, id)
	if err != nil {
		return err
	}
	records, err := s.Store.FindRecords(ctx, w.lab, id)
	if err != nil {
		return err
	}
	b, err := s.OpenBundle(ctx, r.Bundle)
	if err != nil {
		return err
	}
	measures := quality.Measure(records)
	m := pages.RunModel{Frame: s.frame("Run "+id.String()[:8], w), Run: runRow(r, measures), StudyID: r.Study.String(), StudyTitle: b.Study.About.Title, Seed: r.Seed, Bundle: r.Bundle}
	for i, metric := range quality.Metrics {
		m.Measures = append(m.Measures, pages.Measure{Name: metric.Name, Value: text(measures[i], 3), Unit: metric.Unit, Doc: metric.Doc})
	}
	standings := decisions(b.Study, r, records)
	for _, t := range quality.Thresholds(b.Study, records) {
		m.Plots = append(m.Plots, psychometricPlot(t))
		stand(&m.Plots[len(m.Plots)-1], t, standings)
	}
	fillRecords(records, &m)
	for _, p := range quality.Phases(records) {
		m.Phases = append(m.Phases, pages.PhaseRow{
			Task: p.Task, Planned: fmt.Sprintf("%d (%.1f ms)", p.PlannedFrames, p.PlannedMs), Median: text(p.MedianMs, 4), Longest: text(p.LongestMs, 4),
			Trials: p.Trials, Exact: p.Exact, Late: p.Late, EndedEarly: p.EndedEarly,
		})
	}
	decisions, err := s.Store.FindExclusions(ctx, w.lab, r.Study)
	if err != nil {
		return err
	}
	for _, e := range decisions {
		if e.Run == id {
			by := e.Person
			if e.Rule != "" {
				by = "rule " + e.Rule
			}
			m.Decisions = append(m.Decisions, pages.Decision{At: e.DecidedAt.UTC().Format("2006-01-02 15:04"), By: by, Excluded: e.Excluded, Reason: e.Reason})
		}
	}
	return s.render(c, http.StatusOK, pages.Run(m))
}

func psychometricPlot(t quality.Threshold) pages.RunPlot {
	p := pages.RunPlot{Name: t.Block, Parameter: t.Parameter, Unit: t.Unit, Levels: t.Levels, Correct: t.Correct, Text: thresholdText(t), Note: t.Explanation,
		Linear: t.Linear, Known: t.Known, Fitted: t.Function, YLabel: "proportion correct", Marks: "filled right, open wrong", Caption: "Threshold",
	}
	if t.Counted != "" {
		p.YLabel, p.Marks, p.Caption = "proportion of “"+t.Counted+"”", "filled “"+t.Counted+"”", "Point of balance"
	}
	if t.Function == quality.MeanOfSettings {
		p.Marks, p.Caption = "each is a setting", "Mean of the settings"
	}
	if t.Condition != "" {
		p.Name = t.Condition
	}
	if t.Fit != nil {
		p.Predict = t.Fit.Predict
		for _, l := range t.Fit.Data {
			p.Points = append(p.Points, pages.Point{X: l.X, K: l.K, N: l.N})
		}
	}
	if t.Known {
		p.Threshold, p.Low, p.High = t.Threshold, t.Low, t.High
	}
	return p
}

// fillRecords collects calibration, events and frame intervals.
func fillRecords(records []run.Record, m *pages.RunModel) {
	for i := range records {
		r := &records[i]
		switch r.Kind {
		case run.KindCard:
			m.Calibration = append(m.Calibration, fmt.Sprintf("Card: %.3f ± %.3f CSS px/mm from settings of %v px, device pixel ratio %g", r.Card.PxPerMm, r.Card.SDPxPerMm, r.Card.WidthsCSSPx, r.Card.PixelRatio))
		case run.KindDistance:
			m.Calibration = append(m.Calibration, fmt.Sprintf("Distance (%s): %.0f ± %.0f mm, offsets %v mm", r.Distance.Method, r.Distance.DistanceMm, r.Distance.SDMm, r.Distance.OffsetsMm))
		case run.KindDisplayCheck:
			m.Calibration = append(m.Calibration, fmt.Sprintf("Display: %.3f ms (%.2f Hz), jitter %.2f ms, %.1f × %.1f deg, %d × %d px, %s", r.Check.RefreshMs, 1000/r.Check.RefreshMs, r.Check.JitterMs, r.Check.WidthDeg, r.Check.HeightDeg, r.Check.CanvasWidthPx, r.Check.CanvasHeightPx, r.Check.Renderer))
		case run.KindEvent:
			m.Events = append(m.Events, fmt.Sprintf("%d: %s %s", r.Sequence, r.Event.Name, r.Event.Detail))
		case run.KindRefusal:
			m.Events = append(m.Events, fmt.Sprintf("%d: refused at %s: %s %s", r.Sequence, r.Refusal.Step, r.Refusal.Reason, r.Refusal.Detail))
		case run.KindTrial:
			m.IntervalsMs = append(m.IntervalsMs, r.Trial.IntervalsMs...)
		}
	}
}

func (s *Service) exclude(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	reason := c.FormValue("reason")
	if len(reason) < 3 || len(reason) > 2000 {
		return site.NewProblem(http.StatusUnprocessableEntity, "reason", "please give a reason: it is kept in the ledger and exported")
	}
	excluded := c.FormValue("excluded") == "true"
	if err := s.Store.Exclude(c.Request().Context(), w.lab, w.person.ID, id, "", excluded, reason); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/runs/"+id.String())
}
