package main

import (
	"crypto/rand"
	"errors"
	"fmt"
	"io"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/page/gate"
)

// newUserCommand returns "tailbell user": who may look at the page and act.
func newUserCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "user",
		Short: "Say who may look at the page, and who may act on it",
		Long: `Says who may look at the page, and who may act on it. The users are in the file
that the set-up names as users in [page]; a change is in force at once, also for a
daemon that runs.`,
		RunE: func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newUserAddCommand(), newUserListCommand(), newUserRevokeCommand())
	return c
}

// openBook returns the file of users that the set-up names.
func openBook(path string) (gate.Book, error) {
	setup, err := loadSetup(path)
	if err != nil {
		return gate.Book{}, err
	}
	if setup.Page.Users == "" {
		return gate.Book{}, fmt.Errorf("the set-up names no file of users: write e.g. users = \"tailbell-users\" under [page] in %s", path)
	}
	return gate.Book{Path: setup.Page.Users}, nil
}

func newUserAddCommand() *cobra.Command {
	var path, role string
	c := &cobra.Command{
		Use:   "add NAME",
		Short: "Add a user, and print the token to sign in with",
		Long: `Adds a user to the page and prints, on standard output and this once only, the
token to sign in with: only a hash of it is kept. What the user does on the page
carries NAME, so give the name that a colleague would know years later. With
--role read the user may look, with --role act also act on alerts.

Programs send the token as "Authorization: Bearer TOKEN". A token that is lost
can't be found again: revoke the user and add it anew.`,
		RunE: func(c *cobra.Command, args []string) error {
			if role == "" {
				return &usageError{errors.New("--role is missing: give read (look) or act (look, and act on alerts)")}
			}
			may, err := gate.ParseRole(role)
			if err != nil {
				return &usageError{fmt.Errorf("--role %w", err)}
			}
			book, err := openBook(path)
			if err != nil {
				return err
			}
			token, err := book.Add(args[0], may, time.Now(), rand.Reader)
			if err != nil {
				return err
			}
			if err := say(c.OutOrStdout(), "%s", token); err != nil {
				return fmt.Errorf("%s is a user, but the token could not be printed (%w): revoke that user and try again", args[0], err)
			}
			return say(c.ErrOrStderr(), "%s may now %s. This is the only time that the token is shown.", args[0], mayDo(may))
		},
	}
	addConfigFlag(c, &path)
	c.Flags().StringVar(&role, "role", "", "what the user may do, a `ROLE`: read or act; needed")
	return c
}

func mayDo(role gate.Role) string {
	if role == gate.Act {
		return "look at the page and act on alerts"
	}
	return "look at the page"
}

func newUserRevokeCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "revoke NAME",
		Short: "Take a user's token back",
		Long: `Takes a user's token back: it lets nobody in any more, and whoever is signed in
with it is signed out, at once. The name stays in the list, since acts carry it.`,
		RunE: func(c *cobra.Command, args []string) error {
			book, err := openBook(path)
			if err != nil {
				return err
			}
			err = book.Revoke(args[0], time.Now())
			if errors.Is(err, gate.ErrNoUser) {
				return fmt.Errorf("%w: tailbell user list shows who may", err)
			}
			if err != nil {
				return err
			}
			return say(c.OutOrStdout(), "%s may no longer sign in.", args[0])
		},
	}
	addConfigFlag(c, &path)
	return c
}

// userRow is a user as programs read it.
type userRow struct {
	Name    string     `json:"name"`
	Role    string     `json:"role"`
	Added   time.Time  `json:"added"`
	Revoked *time.Time `json:"revoked,omitempty"`
}

func newUserListCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "list",
		Short: "List the users, those revoked too",
		RunE: func(c *cobra.Command, _ []string) error {
			book, err := openBook(path)
			if err != nil {
				return err
			}
			users, err := book.Users()
			if err != nil {
				return err
			}
			rows := make([]userRow, len(users))
			for i := range users {
				u := &users[i]
				rows[i] = userRow{Name: u.Name, Role: u.Role.String(), Added: u.Added}
				if !u.Active() {
					rows[i].Revoked = &u.Revoked
				}
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), rows)
			}
			return writeUsers(c.OutOrStdout(), rows)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

func writeUsers(w io.Writer, rows []userRow) error {
	if len(rows) == 0 {
		return say(w, "No users: tailbell user add NAME --role act adds one.")
	}
	const day = "2006-01-02"
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	lines := [][]string{{"ROLE", "ADDED", "REVOKED", "NAME"}}
	for _, r := range rows {
		revoked := "-"
		if r.Revoked != nil {
			revoked = r.Revoked.Format(day)
		}
		lines = append(lines, []string{r.Role, r.Added.Format(day), revoked, r.Name})
	}
	for _, line := range lines {
		if _, err := fmt.Fprintln(t, strings.Join(line, "\t")); err != nil {
			return err
		}
	}
	return t.Flush()
}
