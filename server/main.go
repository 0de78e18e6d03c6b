// Command distal measures motion perception on participants' own screens: it
// serves studies, keeps their records and says how good they are. Run
// `distal --help`.
package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/signal"
	"strings"
	"syscall"

	"github.com/alecthomas/kong"

	"distal/experiments/library"
	"distal/server/fitting"
)

// Exit codes.
const (
	exitFailed  = 1 // something did not work
	exitRefused = 2 // what was checked is not right: problems in a study, a bundle that does not verify, trials that do not agree
)

// errRefused says that the command worked and its answer is no.
var errRefused = errors.New("refused")

type cli struct {
	Serve    serveCommand    `cmd:"" help:"Serve participants and the workspace. Without --database a private Postgres is started."`
	Demo     demoCommand     `cmd:"" help:"Run a demonstration lab with invented people and simulated runs."`
	Check    checkCommand    `cmd:"" help:"Check a study file and print its problems."`
	Inspect  inspectCommand  `cmd:"" help:"Compute from a study's frames what participants will see: motion signal, sampling, flashes."`
	Rehearse rehearseCommand `cmd:"" help:"Take simulated observers through a study."`
	Plan     planCommand     `cmd:"" help:"Say how many trials and participants a question needs."`
	Fit      fitting.Command `cmd:"" help:"Fit psychometric functions to a table of trials or counts."`
	Bundle   bundleCommand   `cmd:"" help:"Work with signed bundles."`
	Export   exportCommand   `cmd:"" help:"Write a study's data set."`
	Replay   replayCommand   `cmd:"" help:"Re-create every trial of an exported data set and compare."`
	Migrate  migrateCommand  `cmd:"" help:"Bring the database's schema up to date."`
	People   peopleCommand   `cmd:"" help:"Manage the people of a lab."`
	Schema   schemaCommand   `cmd:"" help:"Print the JSON Schema or the reference of study files."`
}

const description = `Distal measures motion perception on participants' own screens.

Exit codes: 0 it worked; 1 something failed; 2 the answer is no (a study has
problems, a bundle does not verify, a trial does not agree).`

func main() { os.Exit(execute(os.Args[1:])) }

func execute(args []string) int {
	var c cli
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	code := 0
	parser, err := kong.New(&c, kong.Name("distal"), kong.Vars{"library": strings.Join(library.Names(), ", ")}, kong.Description(description),
		kong.UsageOnError(), kong.ConfigureHelp(kong.HelpOptions{Compact: true, WrapUpperBound: 100}),
		kong.BindTo(ctx, (*context.Context)(nil)), kong.Exit(func(n int) { code = n; panic(exitNow{}) }))
	if err != nil {
		fmt.Fprintln(os.Stderr, "distal:", err)
		return exitFailed
	}
	parsed, ok := parse(parser, args, &code)
	if !ok {
		return code
	}
	switch err := parsed.Run(); {
	case errors.Is(err, errRefused):
		return exitRefused
	case errors.Is(err, context.Canceled):
		return 0
	case err != nil:
		fmt.Fprintln(os.Stderr, "distal:", err)
		return exitFailed
	}
	return 0
}

// exitNow unwinds when kong has printed its help.
type exitNow struct{}

func parse(parser *kong.Kong, args []string, code *int) (ctx *kong.Context, ok bool) {
	defer func() {
		if r := recover(); r != nil {
			if _, help := r.(exitNow); !help {
				panic(r)
			}
		}
	}()
	ctx, err := parser.Parse(args)
	if err != nil {
		fmt.Fprintln(os.Stderr, "distal:", err)
		fmt.Fprintln(os.Stderr, "Run `distal --help` for the commands.")
		*code = exitFailed
		return nil, false
	}
	return ctx, true
}
