// Package participation serves participants: the shell page of a study, its
// bundle and assets, and the records of their runs. Start with Routes.
package participation

import (
	"bytes"
	"crypto/rand"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"slices"
	"strings"
	"sync"

	"github.com/a-h/templ"
	"github.com/andybalholm/brotli"
	"github.com/google/uuid"
	"github.com/labstack/echo/v4"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
	"distal/server/access"
	"distal/server/bundle"
	"distal/server/site"
	"distal/server/store"
	"distal/web"
	"distal/web/pages"
)

// Service serves participants.
type Service struct {
	Store  *store.Store
	Tokens access.Tokens
	Assets map[string]web.Asset // of this build: a study launched earlier keeps its own
	Secure bool                 // cookies over https only
	// Completed is called after a run has been completed.
	Completed func(lab, study, run uuid.UUID)
	// Seed is that of every run, as 16 hexadecimal digits, so that a test can be
	// repeated; "" has each run draw its own.
	Seed string

	bundles sync.Map // digest → *bundle.Bundle: bundles never change
}

// Routes adds the participant's addresses.
func (s *Service) Routes(e *echo.Echo) {
	e.GET("/s/:link", s.byLink)
	e.GET("/i/:token", s.byInvitation)
	e.GET("/assets/:digest", s.asset)
	e.GET("/api/keys", s.keys)
	e.GET("/api/bundles/:digest", s.bundle)
	e.POST("/api/runs", s.createRun)
	e.GET("/api/run", s.findRun)
	e.POST("/api/run/records", s.appendRecords)
	e.POST("/api/run/withdraw", s.withdraw)
}

// start is what the shell page tells the script.
type start struct {
	Link       string            `json:"link"`
	Invitation *string           `json:"invitation"`
	Bundle     string            `json:"bundle"`
	Languages  []string          `json:"languages"`
	Language   string            `json:"language"`
	State      string            `json:"state"`
	Assets     map[string]string `json:"assets"`
	Title      string            `json:"title"`
}

func (s *Service) byLink(c echo.Context) error {
	lab, st, err := s.Store.FindStudyByLink(c.Request().Context(), c.Param("link"))
	if err != nil {
		return err
	}
	state := st.State
	if state == store.StateOpen && st.Quota > 0 && st.Valid()+st.Running >= st.Quota {
		state = "full"
	}
	key, err := s.deviceKey(c)
	if err != nil {
		return err
	}
	taken, outcome, err := s.Store.TakenPart(c.Request().Context(), lab, st.ID, key)
	if err != nil {
		return err
	}
	if taken && outcome != "" {
		state = "taken"
	} else if taken {
		state = store.StateOpen // the run is still going on: it can be resumed
	}
	return s.shell(c, st, nil, state)
}

func (s *Service) byInvitation(c echo.Context) error {
	ctx := c.Request().Context()
	token := c.Param("token")
	claims, err := s.Tokens.Check(ctx, access.AudienceInvitation, token)
	if err != nil {
		return err
	}
	id, _ := claims.SubjectID()
	invitation, err := s.Store.FindInvitation(ctx, claims.Lab, id)
	if err != nil {
		return err
	}
	st, err := s.Store.FindStudy(ctx, claims.Lab, invitation.Study)
	if err != nil {
		return err
	}
	if _, err := s.deviceKey(c); err != nil {
		return err
	}
	state := st.State
	switch {
	case invitation.Revoked:
		state = store.StateClosed
	case invitation.Used:
		state = "used"
	}
	return s.shell(c, st, &token, state)
}

func (s *Service) shell(c echo.Context, st store.Study, invitation *string, state string) error {
	b, err := s.open(c, st.Bundle)
	if err != nil {
		return err
	}
	address := func(name string) string { return "/assets/" + b.Assets[name] }
	begin := start{
		Link: st.Link, Invitation: invitation, Bundle: st.Bundle, Languages: b.Study.About.Languages,
		Language: preferred(b.Study.About.Languages, c.Request().Header.Get("Accept-Language")), State: state, Title: st.Title,
		Assets: map[string]string{
			bundle.AssetEngine: address(bundle.AssetEngine), bundle.AssetScript: address(bundle.AssetScript), bundle.AssetStyle: address(bundle.AssetStyle),
		},
	}
	return render(c, pages.Shell(pages.ShellModel{
		Title: st.Title, Language: begin.Language, Start: begin,
		Script: address(bundle.AssetScript), ScriptIntegrity: integrity(b.Assets[bundle.AssetScript]),
		Style: address(bundle.AssetStyle), StyleIntegrity: integrity(b.Assets[bundle.AssetStyle]),
	}))
}

// integrity is the value of an integrity attribute for a SHA-256 in hexadecimal.
func integrity(digest string) string {
	raw, _ := hex.DecodeString(digest)
	return "sha256-" + base64.StdEncoding.EncodeToString(raw)
}

// render renders to a buffer first, so that an error is still an error.
func render(c echo.Context, page templ.Component) error {
	var b bytes.Buffer
	if err := page.Render(c.Request().Context(), &b); err != nil {
		return err
	}
	return c.HTMLBlob(http.StatusOK, b.Bytes())
}

// preferred is the first language of the browser's list that the study has.
func preferred(languages []string, accept string) string {
	for part := range strings.SplitSeq(accept, ",") {
		wanted, _, _ := strings.Cut(strings.TrimSpace(part), ";")
		base, _, _ := strings.Cut(wanted, "-")
		for _, l := range languages {
			if strings.EqualFold(l, wanted) || strings.EqualFold(l, base) {
				return l
			}
		}
	}
	return languages[0]
}

// deviceKey is the digest of the device's marker cookie, which it sets the first time.
func (s *Service) deviceKey(c echo.Context) (string, error) {
	name := "distal-device"
	if s.Secure {
		name = "__Host-distal-device"
	}
	if cookie, err := c.Cookie(name); err == nil && len(cookie.Value) == 43 {
		return bundle.Digest([]byte(cookie.Value)), nil
	}
	var b [32]byte
	if _, err := rand.Read(b[:]); err != nil {
		return "", err
	}
	marker := base64.RawURLEncoding.EncodeToString(b[:])
	c.SetCookie(&http.Cookie{Name: name, Value: marker, Path: "/", HttpOnly: true, Secure: s.Secure, SameSite: http.SameSiteLaxMode, MaxAge: 400 * 24 * 3600})
	return bundle.Digest([]byte(marker)), nil
}

// open gives a bundle from the store, opened once.
func (s *Service) open(c echo.Context, digest string) (*bundle.Bundle, error) {
	if b, ok := s.bundles.Load(digest); ok {
		return b.(*bundle.Bundle), nil
	}
	_, signed, err := s.Store.FindBundle(c.Request().Context(), digest)
	if err != nil {
		return nil, err
	}
	b, err := bundle.Open([]byte(signed.Bundle))
	if err != nil {
		return nil, fmt.Errorf("stored bundle %s: %w", digest, err)
	}
	s.bundles.Store(digest, &b)
	return &b, nil
}

func (s *Service) asset(c echo.Context) error {
	digest := c.Param("digest")
	mediaType, plain, compressed, err := s.Store.FindAsset(c.Request().Context(), digest)
	if errors.Is(err, store.ErrNotFound) {
		for _, a := range s.Assets {
			if a.Digest == digest {
				mediaType, plain, compressed, err = a.MediaType, a.Plain, a.Compressed, nil
			}
		}
	}
	if err != nil {
		return err
	}
	h := c.Response().Header()
	h.Set("Cache-Control", "public, max-age=31536000, immutable")
	h.Set("Vary", "Accept-Encoding")
	if strings.HasPrefix(mediaType, "text/") {
		mediaType += "; charset=utf-8"
	}
	if slices.Contains(splitList(c.Request().Header.Get("Accept-Encoding")), "br") {
		h.Set("Content-Encoding", "br")
		return c.Blob(http.StatusOK, mediaType, compressed)
	}
	return c.Blob(http.StatusOK, mediaType, plain)
}

func splitList(s string) []string {
	var list []string
	for part := range strings.SplitSeq(s, ",") {
		name, _, _ := strings.Cut(strings.TrimSpace(part), ";")
		list = append(list, name)
	}
	return list
}

func (s *Service) keys(c echo.Context) error {
	keys, err := s.Store.PublicKeys(c.Request().Context())
	if err != nil {
		return err
	}
	return c.JSON(http.StatusOK, keys)
}

func (s *Service) bundle(c echo.Context) error {
	_, signed, err := s.Store.FindBundle(c.Request().Context(), c.Param("digest"))
	if err != nil {
		return err
	}
	text, err := json.Marshal(signed)
	if err != nil {
		return err
	}
	h := c.Response().Header()
	h.Set("Cache-Control", "public, max-age=31536000, immutable")
	h.Set("Vary", "Accept-Encoding")
	if !slices.Contains(splitList(c.Request().Header.Get("Accept-Encoding")), "br") {
		return c.JSONBlob(http.StatusOK, text)
	}
	var compressed bytes.Buffer
	w := brotli.NewWriterLevel(&compressed, 7)
	if _, err := w.Write(text); err != nil {
		return err
	}
	if err := w.Close(); err != nil {
		return err
	}
	h.Set("Content-Encoding", "br")
	return c.JSONBlob(http.StatusOK, compressed.Bytes())
}

type createRequest struct {
	Link       string          `json:"link"`
	Invitation *string         `json:"invitation"`
	Language   string          `json:"language"`
	Consent    json.RawMessage `json:"consent"`
}

func (s *Service) createRun(c echo.Context) error {
	var request createRequest
	if err := bind(c, &request); err != nil {
		return err
	}
	creationKey := c.Request().Header.Get("Idempotency-Key")
	if _, err := uuid.Parse(creationKey); err != nil {
		return site.NewProblem(http.StatusBadRequest, "idempotency_key", "the header Idempotency-Key must hold a UUID")
	}
	ctx := c.Request().Context()
	lab, st, err := s.Store.FindStudyByLink(ctx, request.Link)
	if err != nil {
		return err
	}
	device, err := s.deviceKey(c)
	if err != nil {
		return err
	}
	n := store.NewRun{Study: st.ID, ParticipantKey: device, CreationKey: creationKey, Seed: s.Seed, Browser: browser(c.Request().UserAgent())}
	if request.Invitation != nil {
		if n.Invitation, err = s.invited(c, lab, st.ID, *request.Invitation); err != nil {
			return err
		}
	}
	b, err := s.open(c, st.Bundle)
	if err != nil {
		return err
	}
	consent, err := decodeConsent(request.Consent, b.Study)
	if err != nil {
		return err
	}
	r, err := s.Store.CreateRun(ctx, lab, n, b.Study, consent)
	if err != nil {
		return err
	}
	token, _, err := s.Tokens.Issue(ctx, access.AudienceRun, lab, st.ID, r.ID)
	if err != nil {
		return err
	}
	return c.JSON(http.StatusCreated, map[string]any{
		"run": r.ID, "token": token, "seed": r.Seed, "group": r.Group, "order": r.Order, "bundle": r.Bundle, "acknowledged": r.Sequence,
	})
}

// invited checks an invitation: of this study, not revoked, not used.
func (s *Service) invited(c echo.Context, lab, study uuid.UUID, token string) (uuid.UUID, error) {
	ctx := c.Request().Context()
	claims, err := s.Tokens.Check(ctx, access.AudienceInvitation, token)
	if err != nil {
		return uuid.Nil, err
	}
	id, _ := claims.SubjectID()
	invitation, err := s.Store.FindInvitation(ctx, claims.Lab, id)
	if err != nil {
		return uuid.Nil, err
	}
	if claims.Lab != lab || invitation.Study != study || invitation.Revoked {
		return uuid.Nil, site.NewProblem(http.StatusConflict, "invitation", "this invitation is not valid any more")
	}
	return id, nil
}

// decodeConsent checks that what was agreed to is what the bundle holds.
func decodeConsent(text []byte, st *study.Study) (run.Record, error) {
	rec, err := decodeRecord(text)
	if err != nil {
		return run.Record{}, err
	}
	if rec.Kind != run.KindConsent || rec.Sequence != 1 {
		return run.Record{}, site.NewProblem(http.StatusUnprocessableEntity, "consent", "a run begins with a consent record, sequence 1")
	}
	for i := range st.Texts {
		t := &st.Texts[i]
		if t.Language != rec.Consent.Language {
			continue
		}
		if run.ConsentDigest(t) != rec.Consent.TextDigest || t.Version != rec.Consent.Version || rec.Consent.Items != len(study.Statements(t.Consent)) {
			return run.Record{}, site.NewProblem(http.StatusUnprocessableEntity, "consent", "the consent is not to the text of this study")
		}
		return *rec, nil
	}
	return run.Record{}, site.NewProblem(http.StatusUnprocessableEntity, "consent", "the study has no consent text in this language")
}

func decodeRecord(text []byte) (*run.Record, error) {
	tree, err := value.ParseJSON(text)
	if err == nil {
		var rec *run.Record
		if rec, err = run.DecodeRecord(tree); err == nil {
			return rec, nil
		}
	}
	return nil, site.NewProblem(http.StatusUnprocessableEntity, "record", "record: "+err.Error())
}

// browser keeps name and main version of browser and system, no more.
func browser(agent string) string {
	var parts []string
	for _, name := range []string{"Firefox/", "Edg/", "Chrome/", "Version/"} {
		if i := strings.Index(agent, name); i >= 0 {
			version, _, _ := strings.Cut(agent[i+len(name):], ".")
			if len(version) > 4 {
				version = version[:4]
			}
			parts = append(parts, strings.TrimSuffix(name, "/")+" "+version)
			break
		}
	}
	for _, system := range []string{"Windows", "Mac OS X", "Android", "CrOS", "Linux"} {
		if strings.Contains(agent, system) {
			parts = append(parts, system)
			break
		}
	}
	return strings.Join(parts, ", ")
}

// bind reads a JSON body strictly.
func bind(c echo.Context, into any) error {
	decoder := json.NewDecoder(c.Request().Body)
	decoder.DisallowUnknownFields()
	if err := decoder.Decode(into); err != nil {
		return badBody(err)
	}
	if _, err := decoder.Token(); err != io.EOF {
		return site.NewProblem(http.StatusBadRequest, "body", "something follows the end of the JSON text")
	}
	return nil
}

func badBody(err error) error {
	var web *echo.HTTPError
	if errors.As(err, &web) {
		return err // the body is too large
	}
	return site.NewProblem(http.StatusBadRequest, "body", "the request cannot be read: "+err.Error())
}

// authorised gives the claims of the run token.
func (s *Service) authorised(c echo.Context) (claims access.Claims, id uuid.UUID, err error) {
	token, ok := strings.CutPrefix(c.Request().Header.Get("Authorization"), "Bearer ")
	if !ok {
		return claims, id, site.NewProblem(http.StatusUnauthorized, "token", "a run token is needed")
	}
	claims, err = s.Tokens.Check(c.Request().Context(), access.AudienceRun, token)
	if err != nil {
		return claims, id, err
	}
	id, err = claims.SubjectID()
	return claims, id, err
}

func (s *Service) findRun(c echo.Context) error {
	claims, id, err := s.authorised(c)
	if err != nil {
		return err
	}
	ctx := c.Request().Context()
	r, err := s.Store.FindRun(ctx, claims.Lab, id)
	if err != nil {
		return err
	}
	records, err := s.Store.FindRecords(ctx, claims.Lab, id)
	if err != nil {
		return err
	}
	bodies := make([]json.RawMessage, len(records))
	for i := range records {
		if bodies[i], err = value.Canonical(records[i].Encode()); err != nil {
			return err
		}
	}
	answer := map[string]any{
		"run": r.ID, "seed": r.Seed, "group": r.Group, "order": r.Order, "bundle": r.Bundle, "acknowledged": r.Sequence, "records": bodies,
	}
	if err := s.ending(c, answer, r.Bundle, r.Outcome, r.CompletionCode); err != nil {
		return err
	}
	return c.JSON(http.StatusOK, answer)
}

// ending adds what a browser needs to know of a run's end.
func (s *Service) ending(c echo.Context, answer map[string]any, digest, outcome, code string) error {
	answer["outcome"], answer["completion_code"], answer["return_url"] = nil, nil, nil
	if outcome == "" {
		return nil
	}
	answer["outcome"] = outcome
	if outcome != store.OutcomeCompleted {
		return nil
	}
	b, err := s.open(c, digest)
	if err != nil {
		return err
	}
	answer["completion_code"] = code
	if b.Study.Return.URL != "" {
		answer["return_url"] = strings.ReplaceAll(b.Study.Return.URL, "{code}", code)
	}
	return nil
}

// maxRecords is how many records one upload may hold.
const maxRecords = 500

func (s *Service) appendRecords(c echo.Context) error {
	claims, id, err := s.authorised(c)
	if err != nil {
		return err
	}
	body, err := io.ReadAll(c.Request().Body)
	if err != nil {
		return badBody(err)
	}
	tree, err := value.ParseJSON(body)
	if err != nil {
		return badBody(err)
	}
	list, ok := tree.Get("records")
	if !ok || list.Kind != value.Sequence || len(list.Items) == 0 || len(list.Items) > maxRecords || len(tree.Members) != 1 {
		return site.NewProblem(http.StatusBadRequest, "body", fmt.Sprintf("{\"records\": [...]} with 1 to %d records is expected", maxRecords))
	}
	records := make([]run.Record, len(list.Items))
	for i := range list.Items {
		rec, err := run.DecodeRecord(list.Items[i])
		if err != nil {
			return site.NewProblem(http.StatusUnprocessableEntity, "record", fmt.Sprintf("record %d of the upload: %v", i+1, err))
		}
		records[i] = *rec
	}
	ack, err := s.Store.Append(c.Request().Context(), claims.Lab, id, records)
	if err != nil {
		return err
	}
	answer := map[string]any{"acknowledged": ack.Sequence}
	if err := s.ending(c, answer, records[0].Bundle, ack.Outcome, ack.CompletionCode); err != nil {
		return err
	}
	if ack.Outcome == store.OutcomeCompleted && s.Completed != nil {
		s.Completed(claims.Lab, claims.Study, id)
	}
	return c.JSON(http.StatusOK, answer)
}

func (s *Service) withdraw(c echo.Context) error {
	claims, id, err := s.authorised(c)
	if err != nil {
		return err
	}
	if err := s.Store.Withdraw(c.Request().Context(), claims.Lab, id); err != nil {
		return err
	}
	return c.JSON(http.StatusOK, map[string]string{"outcome": store.OutcomeWithdrawn})
}
