package main

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"strconv"
	"time"

	"github.com/google/uuid"

	"distal/experiments/exact"
	"distal/experiments/library"
	"distal/experiments/random"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/store"
)

type demoCommand struct {
	Data  string `default:".distal/demo" help:"Data folder of the demonstration."`
	Port  int    `default:"8080" help:"Port to listen on; if it is taken, one of the next twenty."`
	Runs  int    `default:"24" help:"Simulated runs in each study."`
	Fresh bool   `help:"Forget the last demonstration and start over."`
}

// Help says what it does.
func (*demoCommand) Help() string {
	return "Makes a lab with invented people, launches two studies of the library, fills them with simulated runs and prints three addresses."
}

// Invented people of the demonstration lab.
const (
	demoLab = "Laboratory for Visual Motion, Harrowgate Institute (demonstration)"
)

var demoPeople = []store.Person{
	{Name: "Imke Sandvoort", Email: "imke@harrowgate.example", Role: store.RoleResearcher},
	{Name: "Tadeu Okonedo", Email: "tadeu@harrowgate.example", Role: store.RoleAdmin},
}

func (c *demoCommand) Run(ctx context.Context) (err error) {
	if c.Fresh {
		if err := removeData(c.Data); err != nil {
			return err
		}
	}
	if err := os.MkdirAll(c.Data, 0o711); err != nil {
		return err
	}
	conn := connection{Data: c.Data}
	s, end, err := conn.open(ctx)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, end()) }()
	l, err := listen(ctx, "localhost:"+strconv.Itoa(c.Port))
	for next := 1; err != nil && next <= 20; next++ {
		l, err = listen(ctx, "localhost:"+strconv.Itoa(c.Port+next))
	}
	if err != nil {
		return err
	}
	defer l.Close()
	a, err := conn.newApp(s, localOrigin(l))
	if err != nil {
		return err
	}
	d := &demo{app: a, conn: &conn}
	if err := d.prepare(ctx, c.Runs); err != nil {
		return err
	}
	if err := d.announce(ctx); err != nil {
		return err
	}
	return a.serve(ctx, l)
}

// demo prepares the demonstration lab.
type demo struct {
	app  *app
	conn *connection
	lab  uuid.UUID
}

func (d *demo) prepare(ctx context.Context, runs int) error {
	s := d.app.store
	lab, err := findLab(ctx, s, demoLab)
	if err != nil || lab != uuid.Nil {
		d.lab = lab
		return err
	}
	secret, err := d.conn.secret()
	if err != nil {
		return err
	}
	if d.lab, err = s.CreateLab(ctx, demoLab, secret.Seal); err != nil {
		return err
	}
	var researcher uuid.UUID
	for _, p := range demoPeople {
		id, err := s.CreatePerson(ctx, d.lab, uuid.Nil, p)
		if err != nil {
			return err
		}
		if p.Role == store.RoleResearcher {
			researcher = id
		}
	}
	for _, name := range []string{"motion-coherence", "walking-direction"} {
		st, problems := library.Read(name)
		if problems.Failed() {
			return problems
		}
		id, err := d.app.workspace.Launch(ctx, d.lab, researcher, st)
		if err != nil {
			return err
		}
		if err := d.fill(ctx, id, st, runs); err != nil {
			return err
		}
	}
	return nil
}

// fill adds simulated runs, as different from each other as people are.
func (d *demo) fill(ctx context.Context, id uuid.UUID, st *study.Study, runs int) error {
	stored, err := d.app.store.FindStudy(ctx, d.lab, id)
	if err != nil {
		return err
	}
	for i := range runs {
		fmt.Fprintf(os.Stderr, "\r%s: simulated run %d of %d ", st.About.Name, i+1, runs)
		if err := d.simulate(ctx, stored, st, i); err != nil {
			return err
		}
	}
	fmt.Fprintln(os.Stderr)
	return nil
}

func (d *demo) simulate(ctx context.Context, stored store.Study, st *study.Study, i int) error {
	seed := 0x1000 + uint64(i)
	draw := random.New(seed, 1, random.PurposeObserver)
	observer, screen := demoObserver(st, &draw, i)
	start := float64(time.Now().Add(-time.Duration(30-i) * time.Hour).UnixMilli())
	a := run.Assignment{Seed: seed, Order: stored.Simulated + i}
	records, err := rehearsal.Observe(st, a, observer, screen, stored.Bundle, start)
	if err != nil {
		return err
	}
	n := store.NewRun{Study: stored.ID, CreationKey: uuid.NewString(), Browser: "simulated", Simulated: true, Seed: fmt.Sprintf("%016x", seed)}
	created, err := d.app.store.CreateRun(ctx, d.lab, n, st, records[0])
	if err != nil {
		return err
	}
	if created.Order != a.Order {
		return fmt.Errorf("the simulated run got order %d, not %d", created.Order, a.Order)
	}
	records = records[1:]
	if i%9 == 7 { // some leave in the middle
		records = records[:len(records)/2]
	}
	if _, err := d.app.store.Append(ctx, d.lab, created.ID, records); err != nil {
		return err
	}
	return d.app.workspace.Judge(ctx, d.lab, created.ID)
}

// demoObserver draws an invented observer and screen.
func demoObserver(st *study.Study, draw *random.Stream, i int) (rehearsal.Observer, rehearsal.Screen) {
	threshold := 0.2
	if st.About.Name == "walking-direction" {
		threshold = 9
	}
	o := rehearsal.Observer{
		Threshold: threshold * exact.Exp10(float64(0.15*draw.Normal())), Slope: 1.8 + 0.6*draw.Float64(), Lapse: 0.03 * draw.Float64(),
		AgeYears: 19 + draw.Intn(45), Conditions: map[string]float64{"inverted": 1.8},
	}
	if i%11 == 5 {
		o.Lapse = 0.4 // somebody who does not attend: the rules find them
	}
	s := rehearsal.DefaultScreen()
	s.RefreshMs = 1000 / []float64{60, 60, 59.94, 120, 144, 75}[draw.Intn(6)]
	s.DropRate = 0.004 * draw.Float64()
	s.JitterMs = 0.05 + 0.3*draw.Float64()
	s.PxPerMm = 3.4 + 0.8*draw.Float64()
	s.PixelRatio = []float64{1, 1, 1.25, 1.5, 2}[draw.Intn(5)]
	s.DistanceMm = math.Round(500 + 150*draw.Float64())
	if i%13 == 9 {
		s.DropRate = 0.09
	}
	return o, s
}

func (d *demo) announce(ctx context.Context) error {
	studies, err := d.app.store.FindStudies(ctx, d.lab)
	if err != nil {
		return err
	}
	people, err := d.app.store.FindPeople(ctx, d.lab)
	if err != nil {
		return err
	}
	fmt.Println("\nDistal is running with a demonstration lab. People and data are invented; every run so far is simulated.")
	for _, st := range studies {
		if st.State == store.StateOpen {
			fmt.Printf("\n  participant  %s/s/%s\n", d.app.origin, st.Link)
			break
		}
	}
	for _, role := range []string{store.RoleResearcher, store.RoleAdmin} {
		for _, p := range people {
			if p.Role == role && p.Active {
				link, err := d.app.signInLink(ctx, d.lab, p.ID)
				if err != nil {
					return err
				}
				fmt.Printf("\n  %-11s  %s\n", role, link)
				break
			}
		}
	}
	fmt.Println("\nThe sign-in links are good once and for 30 minutes; starting again prints new ones. Ctrl-C stops.")
	return nil
}
