package main

import (
	"context"
	"fmt"
	"os"
	"text/tabwriter"

	"github.com/google/uuid"

	"distal/server/store"
)

type peopleCommand struct {
	List peopleListCommand `cmd:"" help:"List the people of all labs."`
	Add  peopleAddCommand  `cmd:"" help:"Add somebody to a lab, which is made if it does not exist."`
	Link peopleLinkCommand `cmd:"" help:"Print a sign-in link, good once and for 30 minutes."`
}

type peopleListCommand struct {
	connection `embed:""`
}

func (c *peopleListCommand) Run(ctx context.Context) error {
	s, end, err := c.open(ctx)
	if err != nil {
		return err
	}
	defer end()
	labs, err := s.Labs(ctx)
	if err != nil {
		return err
	}
	w := tabwriter.NewWriter(os.Stdout, 0, 4, 2, ' ', 0)
	fmt.Fprintln(w, "lab\tname\te-mail\trole\tactive")
	for _, lab := range labs {
		name, err := s.LabName(ctx, lab)
		if err != nil {
			return err
		}
		people, err := s.FindPeople(ctx, lab)
		if err != nil {
			return err
		}
		for _, p := range people {
			fmt.Fprintf(w, "%s\t%s\t%s\t%s\t%v\n", name, p.Name, p.Email, p.Role, p.Active)
		}
	}
	return w.Flush()
}

type peopleAddCommand struct {
	connection `embed:""`

	Lab   string `required:"" help:"Name of the lab."`
	Name  string `required:"" help:"Name of the person."`
	Email string `required:"" help:"E-mail address."`
	Role  string `enum:"researcher,admin" default:"researcher" help:"researcher or admin."`
}

// Help gives an example.
func (*peopleAddCommand) Help() string {
	return `Example: distal people add --lab "Motion Lab" --name "Ada Example" --email ada@lab.example --role admin`
}

func (c *peopleAddCommand) Run(ctx context.Context) error {
	s, end, err := c.open(ctx)
	if err != nil {
		return err
	}
	defer end()
	lab, err := findLab(ctx, s, c.Lab)
	if err != nil {
		return err
	}
	if lab == uuid.Nil {
		secret, err := c.secret()
		if err != nil {
			return err
		}
		if lab, err = s.CreateLab(ctx, c.Lab, secret.Seal); err != nil {
			return err
		}
	}
	if _, err := s.CreatePerson(ctx, lab, uuid.Nil, store.Person{Name: c.Name, Email: c.Email, Role: c.Role}); err != nil {
		return err
	}
	fmt.Printf("%s is now in %s. `distal people link %s` prints a sign-in link.\n", c.Name, c.Lab, c.Email)
	return nil
}

// findLab finds a lab by name, Nil if there is none.
func findLab(ctx context.Context, s *store.Store, name string) (uuid.UUID, error) {
	labs, err := s.Labs(ctx)
	if err != nil {
		return uuid.Nil, err
	}
	for _, lab := range labs {
		if n, err := s.LabName(ctx, lab); err == nil && n == name {
			return lab, nil
		}
	}
	return uuid.Nil, nil
}

type peopleLinkCommand struct {
	connection `embed:""`

	Email  string `arg:"" help:"E-mail address of the person."`
	Origin string `default:"http://localhost:8080" help:"Where the server is reached."`
}

func (c *peopleLinkCommand) Run(ctx context.Context) error {
	s, end, err := c.open(ctx)
	if err != nil {
		return err
	}
	defer end()
	app, err := c.newApp(s, c.Origin)
	if err != nil {
		return err
	}
	labs, err := s.Labs(ctx)
	if err != nil {
		return err
	}
	for _, lab := range labs {
		people, err := s.FindPeople(ctx, lab)
		if err != nil {
			return err
		}
		for _, p := range people {
			if p.Email == c.Email && p.Active {
				link, err := app.signInLink(ctx, lab, p.ID)
				if err != nil {
					return err
				}
				fmt.Println(link)
				return nil
			}
		}
	}
	return fmt.Errorf("nobody active has the e-mail address %s", c.Email)
}
