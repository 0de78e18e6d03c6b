package main

import (
	"context"
	"fmt"
	"testing"

	"github.com/chromedp/cdproto/network"
	"github.com/chromedp/chromedp"

	"distal/experiments/study"
	"distal/server/store"
)

// A researcher makes an invitation in the workspace; a German reader takes it up,
// in German on every page, and has a screen that is too slow: the refusal is polite
// and says what is missing. The invitation is then used up, another one is revoked.
func TestInvitedInGerman(t *testing.T) {
	l, _, _ := startPages(t, func(s *study.Study) {
		s.Screen.Distance, s.Screen.StatedDistanceMm = study.StatedDistance, 570
		s.Screen.MinRefreshHz, s.Screen.CardRepeats = 110, 2
	})
	w := newWalker(t, l, "about:blank")
	link, err := l.app.signInLink(context.Background(), l.id, l.admin)
	if err != nil {
		t.Fatal(err)
	}
	page := l.url + "/studies/" + l.study.ID.String()
	w.do(chromedp.Navigate(link))
	w.click("sign-in")
	w.see("study-short-walk")
	w.do(chromedp.Navigate(page))
	invite := func(n int) (links []string) {
		t.Helper()
		w.click("invite")
		w.do(chromedp.WaitVisible(fmt.Sprintf(`tr:nth-child(%d) input.link`, n), chromedp.ByQuery),
			chromedp.Evaluate(`[...document.querySelectorAll("input.link")].map((i) => i.value)`, &links))
		return links
	}
	first := invite(1)[0]

	german := func(name string) {
		t.Helper()
		w.see(name)
		var language string
		w.do(chromedp.Evaluate(`document.documentElement.lang`, &language))
		if language != "de" {
			t.Errorf("%s is marked as %q", name, language)
		}
	}
	visit := func(address string) {
		t.Helper()
		w.do(network.ClearBrowserCookies(), chromedp.Navigate("about:blank"), chromedp.Navigate(address))
	}
	visit(first)
	w.see("page-consent")
	w.click("language-de")
	german("page-consent")
	w.says("h1", "In welche Richtung gehen die Punkte?")
	w.consent()
	german("page-screening")
	w.says(".sheet", "Krampfanfall")
	w.screening()
	german("page-card")
	w.says(".sheet", "Karte")
	w.card()
	german("page-distance")
	w.says(".sheet", "57")
	w.look("distance")
	w.distance()
	german("page-check")
	w.click("continue")
	w.see("check-stop")
	w.says(".sheet", "110")
	w.inspect("check-refused")
	w.click("check-stop")
	german("page-refused")
	w.look("refused")
	_, _, stored := w.state()
	if stored.Outcome != store.OutcomeRefused {
		t.Errorf("outcome %q", stored.Outcome)
	}

	w.do(chromedp.Evaluate(`indexedDB.deleteDatabase("distal")`, nil))
	visit(first)
	w.look("used")

	// A revoked invitation says that it is over.
	if link, err = l.app.signInLink(context.Background(), l.id, l.admin); err != nil {
		t.Fatal(err)
	}
	w.do(chromedp.Navigate(link))
	w.click("sign-in")
	w.see("study-short-walk")
	w.do(chromedp.Navigate(page))
	invite(2)
	var second string
	w.do(chromedp.Evaluate(`[...document.querySelectorAll("tr")].find((row) => row.querySelector("form[action$='/revoke']")).querySelector("input.link").value`, &second))
	w.do(chromedp.Click(`form[action$="/revoke"] button`, chromedp.ByQuery), chromedp.WaitNotPresent(`form[action$="/revoke"]`, chromedp.ByQuery))
	visit(second)
	w.look("closed")
}
