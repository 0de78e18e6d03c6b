package workspace

import (
	"net/http"
	"net/mail"

	"github.com/google/uuid"
	"github.com/labstack/echo/v4"

	"distal/server/access"
	"distal/server/site"
	"distal/server/store"
	"distal/web/pages"
)

func (s *Service) people(c echo.Context, w who) error { return s.peoplePage(c, w, "", "") }

func (s *Service) peoplePage(c echo.Context, w who, linkFor, link string) error {
	list, err := s.Store.FindPeople(c.Request().Context(), w.lab)
	if err != nil {
		return err
	}
	m := pages.PeopleModel{Frame: s.frame("People", w), Link: link, LinkFor: linkFor}
	for _, p := range list {
		m.People = append(m.People, pages.PersonRow{ID: p.ID.String(), Name: p.Name, Email: p.Email, Role: p.Role, Active: p.Active, Self: p.ID == w.person.ID})
	}
	return s.render(c, http.StatusOK, pages.People(m))
}

func (s *Service) addPerson(c echo.Context, w who) error {
	p := store.Person{Name: c.FormValue("name"), Email: c.FormValue("email"), Role: c.FormValue("role")}
	address, err := mail.ParseAddress(p.Email)
	if err != nil || address.Address != p.Email {
		return site.NewProblem(http.StatusUnprocessableEntity, "email", "please give an e-mail address such as name@lab.example")
	}
	if p.Name == "" || p.Role != store.RoleResearcher && p.Role != store.RoleAdmin {
		return site.NewProblem(http.StatusUnprocessableEntity, "person", "please give a name and a role, researcher or admin")
	}
	if _, err := s.Store.CreatePerson(c.Request().Context(), w.lab, w.person.ID, p); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/people")
}

func (s *Service) setActive(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	if id == w.person.ID {
		return site.NewProblem(http.StatusUnprocessableEntity, "self", "you cannot shut yourself out")
	}
	if err := s.Store.SetPersonActive(c.Request().Context(), w.lab, w.person.ID, id, c.FormValue("active") == "true"); err != nil {
		return err
	}
	return c.Redirect(http.StatusSeeOther, "/people")
}

func (s *Service) makeLink(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	p, err := s.Store.FindPerson(c.Request().Context(), w.lab, id)
	if err != nil {
		return err
	}
	if !p.Active {
		return site.NewProblem(http.StatusConflict, "inactive", "this person's access has been ended")
	}
	token, _, err := s.Tokens.Issue(c.Request().Context(), access.AudienceSignIn, w.lab, uuid.Nil, id)
	if err != nil {
		return err
	}
	return s.peoplePage(c, w, p.Name, s.Origin+"/sign-in/"+token)
}

func (s *Service) ledger(c echo.Context, w who) error {
	ctx := c.Request().Context()
	entries, err := s.Store.Ledger(ctx, w.lab, 500)
	if err != nil {
		return err
	}
	bad, err := s.Store.VerifyLedger(ctx, w.lab)
	if err != nil {
		return err
	}
	m := pages.LedgerModel{Frame: s.frame("Ledger", w), Broken: bad}
	for _, e := range entries {
		person := e.Person
		if person == "" {
			person = "server or participant"
		}
		m.Entries = append(m.Entries, pages.LedgerRow{Number: e.Number, At: e.At.UTC().Format("2006-01-02 15:04:05"), Person: person, Action: e.Action, Detail: e.Detail})
	}
	return s.render(c, http.StatusOK, pages.Ledger(m))
}
