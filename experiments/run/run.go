// Package run is the state machine of one run: what comes next, given what was
// recorded. The browser, the server's rehearsals and replay all use it. Start
// with Step (what comes next), Record (what happened) and Run, which joins them.
package run
