// Package workspace serves the pages of a lab's people: studies, runs, data
// quality, exclusions, people and the ledger. Start with Routes, the table of
// addresses with the role that each needs.
package workspace

import (
	"bytes"
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"strings"
	"time"

	"github.com/a-h/templ"
	"github.com/google/uuid"
	"github.com/labstack/echo/v4"

	"distal/experiments/study"
	"distal/server/access"
	"distal/server/bundle"
	"distal/server/inspecting"
	"distal/server/quality"
	"distal/server/site"
	"distal/server/store"
	"distal/web"
	"distal/web/pages"
)

// Service serves the workspace.
type Service struct {
	Store  *store.Store
	Tokens access.Tokens
	Keys   access.KeySource
	Assets map[string]web.Asset
	Origin string
	Secure bool
	Log    *slog.Logger
	Now    func() time.Time

	live broadcaster
}

// Route is one address of the workspace. Role is what it needs: "" for
// everybody, researcher for all people of the lab, admin for admins alone.
type Route struct {
	Method  string
	Path    string
	Role    string
	Purpose string
	handler func(*Service, echo.Context, who) error
}

// Table lists the routes of the workspace.
var Table = []Route{
	{http.MethodGet, "/", "", "to the studies", (*Service).home},
	{http.MethodGet, "/sign-in", "", "how to sign in", (*Service).signInHelp},
	{http.MethodGet, "/sign-in/:token", "", "asks before a sign-in link is used up", (*Service).signInPage},
	{http.MethodPost, "/sign-in/:token", "", "uses a sign-in link", (*Service).signIn},
	{http.MethodPost, "/sign-out", store.RoleResearcher, "ends the session", (*Service).signOut},
	{http.MethodGet, "/studies", store.RoleResearcher, "the lab's studies", (*Service).studies},
	{http.MethodGet, "/library", store.RoleResearcher, "studies that can be launched", (*Service).library},
	{http.MethodPost, "/library/:name/launch", store.RoleResearcher, "launches a study of the library", (*Service).launch},
	{http.MethodGet, "/studies/:id", store.RoleResearcher, "a study and its runs", (*Service).study},
	{http.MethodGet, "/studies/:id/live", store.RoleResearcher, "tells when new data arrive", (*Service).liveEvents},
	{http.MethodPost, "/studies/:id/state", store.RoleResearcher, "opens, pauses or closes a study", (*Service).setState},
	{http.MethodPost, "/studies/:id/quota", store.RoleResearcher, "changes the quota", (*Service).setQuota},
	{http.MethodPost, "/studies/:id/invitations", store.RoleResearcher, "makes single-use invitations", (*Service).invite},
	{http.MethodPost, "/invitations/:id/revoke", store.RoleResearcher, "makes an invitation useless", (*Service).revokeInvitation},
	{http.MethodGet, "/studies/:id/data.zip", store.RoleResearcher, "the data set", (*Service).download},
	{http.MethodGet, "/runs/:id", store.RoleResearcher, "a run", (*Service).run},
	{http.MethodPost, "/runs/:id/exclusion", store.RoleAdmin, "excludes a run or includes it again", (*Service).exclude},
	{http.MethodGet, "/people", store.RoleAdmin, "the lab's people", (*Service).people},
	{http.MethodPost, "/people", store.RoleAdmin, "adds somebody", (*Service).addPerson},
	{http.MethodPost, "/people/:id/active", store.RoleAdmin, "lets somebody in or keeps them out", (*Service).setActive},
	{http.MethodPost, "/people/:id/link", store.RoleAdmin, "makes a sign-in link for somebody", (*Service).makeLink},
	{http.MethodGet, "/ledger", store.RoleAdmin, "who did what", (*Service).ledger},
}

// Routes adds the workspace's addresses.
func (s *Service) Routes(e *echo.Echo) {
	for _, r := range Table {
		e.Add(r.Method, r.Path, func(c echo.Context) error {
			w, err := s.who(c)
			if err != nil {
				return err
			}
			if r.Role != "" && w.person.ID == uuid.Nil {
				if c.Request().Method == http.MethodGet && strings.Contains(c.Request().Header.Get("Accept"), "text/html") {
					return c.Redirect(http.StatusSeeOther, "/sign-in")
				}
				return site.NewProblem(http.StatusUnauthorized, "sign_in", "please sign in first")
			}
			if r.Role == store.RoleAdmin && w.person.Role != store.RoleAdmin {
				return site.NewProblem(http.StatusForbidden, "role", "only admins of the lab can do this")
			}
			return r.handler(s, c, w)
		})
	}
}

// who is the signed-in person; the zero value is nobody.
type who struct {
	lab    uuid.UUID
	person store.Person
	claims access.Claims
}

func (s *Service) cookieName() string {
	if s.Secure {
		return "__Host-distal-session"
	}
	return "distal-session"
}

// who finds the person of the session cookie. A person who was kept out since
// is nobody.
func (s *Service) who(c echo.Context) (who, error) {
	cookie, err := c.Cookie(s.cookieName())
	if err != nil {
		return who{}, nil
	}
	ctx := c.Request().Context()
	claims, err := s.Tokens.Check(ctx, access.AudienceSession, cookie.Value)
	if errors.Is(err, access.ErrInvalid) || errors.Is(err, access.ErrExpired) {
		return who{}, nil
	}
	if err != nil {
		return who{}, err
	}
	spent, err := s.Store.TokenSpent(ctx, claims.Lab, claims.ID)
	if err != nil || spent {
		return who{}, err
	}
	id, _ := claims.SubjectID()
	person, err := s.Store.FindPerson(ctx, claims.Lab, id)
	if errors.Is(err, store.ErrNotFound) || err == nil && !person.Active {
		return who{}, nil
	}
	return who{claims.Lab, person, claims}, err
}

func (s *Service) home(c echo.Context, _ who) error {
	return c.Redirect(http.StatusSeeOther, "/studies")
}

func (s *Service) signInHelp(c echo.Context, _ who) error {
	return s.render(c, http.StatusOK, pages.SignInHelp(s.frame("Sign in", who{})))
}

// signInPage shows who signs in; only the button uses the link up, so that
// mail programs that look at links do no harm.
func (s *Service) signInPage(c echo.Context, _ who) error {
	claims, person, err := s.signingIn(c)
	if err != nil {
		return err
	}
	lab, err := s.Store.LabName(c.Request().Context(), claims.Lab)
	if err != nil {
		return err
	}
	return s.render(c, http.StatusOK, pages.SignIn(s.frame("Sign in", who{}), person.Name, lab, c.Param("token")))
}

func (s *Service) signingIn(c echo.Context) (access.Claims, store.Person, error) {
	ctx := c.Request().Context()
	claims, err := s.Tokens.Check(ctx, access.AudienceSignIn, c.Param("token"))
	if err != nil {
		return claims, store.Person{}, err
	}
	spent, err := s.Store.TokenSpent(ctx, claims.Lab, claims.ID)
	if err != nil {
		return claims, store.Person{}, err
	}
	if spent {
		return claims, store.Person{}, site.NewProblem(http.StatusConflict, "used", "this sign-in link was already used: ask for a new one")
	}
	id, _ := claims.SubjectID()
	person, err := s.Store.FindPerson(ctx, claims.Lab, id)
	if err == nil && !person.Active {
		err = site.NewProblem(http.StatusForbidden, "inactive", "your access to this lab has been ended")
	}
	return claims, person, err
}

func (s *Service) signIn(c echo.Context, _ who) error {
	claims, person, err := s.signingIn(c)
	if err != nil {
		return err
	}
	ctx := c.Request().Context()
	if err := s.Store.SpendToken(ctx, claims.Lab, claims.ID, "used", claims.ExpiresAt.Time); err != nil {
		if errors.Is(err, store.ErrConflict) {
			return site.NewProblem(http.StatusConflict, "used", "this sign-in link was already used: ask for a new one")
		}
		return err
	}
	token, session, err := s.Tokens.Issue(ctx, access.AudienceSession, claims.Lab, uuid.Nil, person.ID)
	if err != nil {
		return err
	}
	c.SetCookie(&http.Cookie{
		Name: s.cookieName(), Value: token, Path: "/", HttpOnly: true, Secure: s.Secure,
		SameSite: http.SameSiteLaxMode, Expires: session.ExpiresAt.Time,
	})
	return c.Redirect(http.StatusSeeOther, "/studies")
}

func (s *Service) signOut(c echo.Context, w who) error {
	err := s.Store.SpendToken(c.Request().Context(), w.lab, w.claims.ID, "revoked", w.claims.ExpiresAt.Time)
	if err != nil && !errors.Is(err, store.ErrConflict) {
		return err
	}
	c.SetCookie(&http.Cookie{Name: s.cookieName(), Value: "", Path: "/", HttpOnly: true, Secure: s.Secure, MaxAge: -1})
	return c.Redirect(http.StatusSeeOther, "/sign-in")
}

// frame is what stands around a page.
func (s *Service) frame(title string, w who) pages.Frame {
	return pages.Frame{
		Title: title, Person: w.person.Name, Admin: w.person.Role == store.RoleAdmin,
		Script: "/assets/" + s.Assets["workspace_js"].Digest, ScriptIntegrity: s.Assets["workspace_js"].Integrity,
		Style: "/assets/" + s.Assets["workspace_css"].Digest, StyleIntegrity: s.Assets["workspace_css"].Integrity,
	}
}

func (s *Service) render(c echo.Context, status int, page templ.Component) error {
	var b bytes.Buffer
	if err := page.Render(c.Request().Context(), &b); err != nil {
		return err
	}
	return c.HTMLBlob(status, b.Bytes())
}

// ErrorPage shows an error as a page.
func (s *Service) ErrorPage(c echo.Context, status int, message, reference string) error {
	return s.render(c, status, pages.Problem(s.frame("Something is not right", who{}), message, reference))
}

// parameter reads an identifier in the address.
func parameter(c echo.Context) (uuid.UUID, error) {
	id, err := uuid.Parse(c.Param("id"))
	if err != nil {
		return uuid.Nil, store.ErrNotFound
	}
	return id, nil
}

// Launch freezes a study, signs it and opens it.
func (s *Service) Launch(ctx context.Context, lab, person uuid.UUID, st *study.Study) (uuid.UUID, error) {
	if problems := quality.Check(st); problems.Failed() {
		return uuid.Nil, problems
	}
	if st.About.FlashApproval == "" {
		hazard, err := inspecting.Hazards(ctx, st)
		if err != nil {
			return uuid.Nil, err
		}
		if hazard != "" {
			return uuid.Nil, site.NewProblem(http.StatusUnprocessableEntity, "flashes",
				"the study is held back: "+hazard+". It can be launched with a justification by a named person of the lab in about.flash_approval; `distal inspect` shows the frames")
		}
	}
	digests := map[string]string{}
	var assets []web.Asset
	for _, name := range []string{bundle.AssetEngine, bundle.AssetScript, bundle.AssetStyle} {
		a, ok := s.Assets[name]
		if !ok {
			return uuid.Nil, web.ErrNotBuilt
		}
		digests[name] = a.Digest
		assets = append(assets, a)
	}
	b, err := bundle.Assemble(st, digests)
	if err != nil {
		return uuid.Nil, err
	}
	key, err := s.Keys.SigningKey(ctx, lab)
	if err != nil {
		return uuid.Nil, err
	}
	signed, err := b.Sign(key, s.Now())
	if err != nil {
		return uuid.Nil, err
	}
	return s.Store.LaunchStudy(ctx, lab, person, newLink(st.About.Name), b, signed, assets)
}

// newLink is the study's name with six random letters, hard to guess by chance.
func newLink(name string) string {
	const letters = "abcdefghjkmnpqrstuvwxyz23456789"
	var b [6]byte
	rand.Read(b[:])
	for i := range b {
		b[i] = letters[int(b[i])%len(letters)]
	}
	name = strings.ReplaceAll(name, "_", "-")
	if len(name) > 40 {
		name = name[:40]
	}
	return fmt.Sprintf("%s-%s", name, b[:])
}

// Judge applies the study's exclusion rules to an ended run.
func (s *Service) Judge(ctx context.Context, lab, id uuid.UUID) error {
	r, err := s.Store.FindRun(ctx, lab, id)
	if err != nil {
		return err
	}
	if r.Outcome != store.OutcomeCompleted {
		return nil
	}
	b, err := s.OpenBundle(ctx, r.Bundle)
	if err != nil {
		return err
	}
	rules, err := quality.Compile(b.Study.Exclusions)
	if err != nil {
		return err
	}
	records, err := s.Store.FindRecords(ctx, lab, id)
	if err != nil {
		return err
	}
	breaches, err := rules.Apply(quality.Measure(records))
	if err != nil {
		return err
	}
	broken := map[string]string{}
	for _, breach := range breaches {
		broken[breach.Rule] = breach.Reason
	}
	for _, rule := range b.Study.Exclusions {
		reason, excluded := broken[rule.Name]
		if reason == "" {
			reason = "the rule is no longer broken"
		}
		if err := s.Store.Exclude(ctx, lab, uuid.Nil, id, rule.Name, excluded, reason); err != nil {
			return err
		}
	}
	return nil
}

// OpenBundle opens a stored bundle.
func (s *Service) OpenBundle(ctx context.Context, digest string) (bundle.Bundle, error) {
	_, signed, err := s.Store.FindBundle(ctx, digest)
	if err != nil {
		return bundle.Bundle{}, err
	}
	return bundle.Open([]byte(signed.Bundle))
}
