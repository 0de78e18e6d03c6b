// Command load drills a whole server under load: the real `distal serve` on a
// private Postgres, and simulated participants who upload trials one at a time
// through HTTP and wait for each to be acknowledged. At the end Postgres is
// killed, started again, and every acknowledged record is looked for. With
// --faults server and Postgres are also killed in the middle.
//
//	go run ./deploy/load
//	go run ./deploy/load --seconds 20 --clients 100 --faults
//
// It ends with status 1 if a record is missing, doubled or altered, or if fewer
// trials a second were acknowledged than --target says.
package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"os"
	"os/signal"
	"syscall"
	"time"
)

// options say how the drill goes.
type options struct {
	clients int           // participants at once
	length  time.Duration // of the load itself
	target  float64       // acknowledged trials a second, 0 for none
	faults  bool          // kill server and Postgres in the middle
	study   string        // of the library
}

func main() {
	var o options
	seconds := flag.Float64("seconds", 60, "length of the load in seconds")
	flag.IntVar(&o.clients, "clients", 64, "simulated participants at once")
	flag.Float64Var(&o.target, "target", 1000, "acknowledged trials a second that must be reached; 0 for none")
	flag.BoolVar(&o.faults, "faults", false, "kill the server after a third of the time and Postgres after two thirds")
	flag.StringVar(&o.study, "study", "motion-coherence", "study of the library that they take")
	flag.Parse()
	o.length = time.Duration(*seconds * float64(time.Second))
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	if err := drillAndReport(ctx, o); err != nil {
		fmt.Fprintln(os.Stderr, "load:", err)
		os.Exit(1)
	}
}

func drillAndReport(ctx context.Context, o options) error {
	r, err := drill(ctx, o, os.Stdout)
	if err != nil {
		return err
	}
	r.print(os.Stdout)
	return errors.Join(r.verdict(), r.speed(o))
}
