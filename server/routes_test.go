package main

import (
	"context"
	"net/http"
	"net/url"
	"regexp"
	"strings"
	"testing"

	"github.com/google/uuid"

	"distal/server/store"
	"distal/server/workspace"
)

// signedIn is a client with a session of the person.
func (l *lab) signedIn(t *testing.T, person uuid.UUID) *http.Client {
	t.Helper()
	link, err := l.app.signInLink(context.Background(), l.id, person)
	if err != nil {
		t.Fatal(err)
	}
	c := client(t)
	response, err := c.Post(link, "", nil)
	if err != nil {
		t.Fatal(err)
	}
	response.Body.Close()
	if response.StatusCode != http.StatusSeeOther {
		t.Fatalf("sign-in: status %d", response.StatusCode)
	}
	return c
}

func request(t *testing.T, c *http.Client, method, address string, header map[string]string) int {
	t.Helper()
	r, err := http.NewRequest(method, address, strings.NewReader(url.Values{}.Encode()))
	if err != nil {
		t.Fatal(err)
	}
	for name, value := range header {
		r.Header.Set(name, value)
	}
	response, err := c.Do(r)
	if err != nil {
		t.Fatal(err)
	}
	response.Body.Close()
	return response.StatusCode
}

var placeholder = regexp.MustCompile(`:[a-z]+`)

// Every route against every role and nobody. What a role may not do is 401 or
// 403; what it may do is anything else (an unknown identifier is 404, a missing
// field 422), so that nothing is changed here.
func TestEveryRouteEveryRole(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	ctx := context.Background()
	researcher, err := l.app.store.CreatePerson(ctx, l.id, l.admin, store.Person{Name: "Rex Researcher", Email: "rex@lab.example", Role: store.RoleResearcher})
	if err != nil {
		t.Fatal(err)
	}
	clients := map[string]*http.Client{"nobody": client(t), store.RoleResearcher: l.signedIn(t, researcher), store.RoleAdmin: l.signedIn(t, l.admin)}
	rank := map[string]int{"nobody": 0, "": 0, store.RoleResearcher: 1, store.RoleAdmin: 2}
	checked := 0
	for _, route := range workspace.Table {
		for role, c := range clients {
			if route.Path == "/sign-out" && role != "nobody" {
				continue // it would end the session; tested below
			}
			path := placeholder.ReplaceAllString(route.Path, uuid.NewString())
			status := request(t, c, route.Method, l.url+path, nil)
			refused := status == http.StatusUnauthorized || status == http.StatusForbidden
			// A made-up sign-in token is refused to everybody.
			want := rank[role] < rank[route.Role] || strings.HasPrefix(route.Path, "/sign-in/")
			if refused != want {
				t.Errorf("%s %s as %s: status %d, refused should be %v", route.Method, route.Path, role, status, want)
			}
			if status >= 500 {
				t.Errorf("%s %s as %s: status %d", route.Method, route.Path, role, status)
			}
			checked++
		}
	}
	if checked < 3*len(workspace.Table)-4 {
		t.Errorf("only %d combinations", checked)
	}
}

// Another lab's study, run and person do not exist for a lab.
func TestLabsDoNotSeeEachOther(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	ctx := context.Background()
	secret := l.app.ring.Secret
	other, err := l.app.store.CreateLab(ctx, "Other lab", secret.Seal)
	if err != nil {
		t.Fatal(err)
	}
	stranger, err := l.app.store.CreatePerson(ctx, other, uuid.Nil, store.Person{Name: "Sam Stranger", Email: "sam@other.example", Role: store.RoleAdmin})
	if err != nil {
		t.Fatal(err)
	}
	strangers := &lab{t: t, app: l.app, id: other, admin: stranger, url: l.url}
	c := strangers.signedIn(t, stranger)
	for _, path := range []string{"/studies/" + l.study.ID.String(), "/studies/" + l.study.ID.String() + "/data.zip", "/studies/" + l.study.ID.String() + "/live"} {
		if status := request(t, c, http.MethodGet, l.url+path, nil); status != http.StatusNotFound {
			t.Errorf("%s: status %d, want 404", path, status)
		}
	}
	if status := request(t, l.signedIn(t, l.admin), http.MethodGet, l.url+"/studies/"+l.study.ID.String(), nil); status != http.StatusOK {
		t.Errorf("the lab's own study: status %d", status)
	}
}

func TestSessions(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	ctx := context.Background()

	link, err := l.app.signInLink(ctx, l.id, l.admin)
	if err != nil {
		t.Fatal(err)
	}
	c := client(t)
	if status := request(t, c, http.MethodGet, link, nil); status != http.StatusOK {
		t.Errorf("looking at a sign-in link: status %d", status)
	}
	if status := request(t, c, http.MethodPost, link, nil); status != http.StatusSeeOther {
		t.Errorf("first use: status %d", status)
	}
	if status := request(t, client(t), http.MethodPost, link, nil); status != http.StatusConflict {
		t.Errorf("second use: status %d, want 409", status)
	}
	if status := request(t, c, http.MethodPost, l.url+"/sign-out", map[string]string{"Origin": "https://evil.example"}); status != http.StatusForbidden {
		t.Errorf("sign-out from another site: status %d, want 403", status)
	}
	// The cookie is kept aside: after signing out the session itself is dead.
	address, _ := url.Parse(l.url)
	cookies := c.Jar.Cookies(address)
	if status := request(t, c, http.MethodPost, l.url+"/sign-out", nil); status != http.StatusSeeOther {
		t.Errorf("sign-out: status %d", status)
	}
	c.Jar.SetCookies(address, cookies)
	if status := request(t, c, http.MethodGet, l.url+"/ledger", nil); status != http.StatusUnauthorized {
		t.Errorf("after sign-out: status %d, want 401", status)
	}
	// Whoever is kept out is out at once.
	second, err := l.app.store.CreatePerson(ctx, l.id, l.admin, store.Person{Name: "Bo Brief", Email: "bo@lab.example", Role: store.RoleAdmin})
	if err != nil {
		t.Fatal(err)
	}
	brief := l.signedIn(t, second)
	if err := l.app.store.SetPersonActive(ctx, l.id, l.admin, second, false); err != nil {
		t.Fatal(err)
	}
	if status := request(t, brief, http.MethodGet, l.url+"/ledger", nil); status != http.StatusUnauthorized {
		t.Errorf("after access was ended: status %d, want 401", status)
	}
}

func TestSafetyHeaders(t *testing.T) {
	t.Parallel()
	l := startLab(t, "motion-coherence")
	for _, path := range []string{"/s/" + l.study.Link, "/sign-in", "/api/keys", "/nothing"} {
		response, err := http.Get(l.url + path)
		if err != nil {
			t.Fatal(err)
		}
		response.Body.Close()
		h := response.Header
		if csp := h.Get("Content-Security-Policy"); !strings.Contains(csp, "default-src 'none'") || strings.Contains(csp, "unsafe-inline") {
			t.Errorf("%s: content-security policy %q", path, csp)
		}
		for name, want := range map[string]string{
			"Cross-Origin-Opener-Policy": "same-origin", "Cross-Origin-Embedder-Policy": "require-corp", "X-Content-Type-Options": "nosniff", "Referrer-Policy": "no-referrer",
		} {
			if got := h.Get(name); got != want {
				t.Errorf("%s: %s is %q, want %q", path, name, got, want)
			}
		}
	}
}
