package main

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"

	"github.com/spf13/pflag"
	"golang.org/x/term"

	"throatwatch/dashboard/access"
)

// userUsage stands before the flags of `throatwatch user`.
const userUsage = `usage: throatwatch user list|add|set-password|token|remove [NAME] --users FILE

People and machines that may use a watch started with --users FILE. A watch that is
on takes a change up within seconds.

  list                      names and roles
  add NAME --role ROLE      a person; the password is asked for
  set-password NAME         another password; the person's sessions end
  token NAME --role ROLE    a machine; its token is printed once and kept nowhere
  remove NAME               a person or a machine

  viewer     reads
  operator   also acknowledges, shelves, marks, enters into the log, starts and ends runs
  engineer   also takes out of service, changes the configuration, swaps and readmits sensors

`

// userOptions are the flags of `throatwatch user`.
type userOptions struct {
	file, role, passwordFile string
	json                     bool
}

// userCommand keeps the users file.
func userCommand(_ context.Context, args []string, stdout, stderr io.Writer) int {
	var o userOptions
	fs := pflag.NewFlagSet("user", pflag.ContinueOnError)
	fs.SetOutput(stderr)
	fs.SortFlags = false
	fs.Usage = func() { _, _ = fmt.Fprintf(stderr, "%s%s\n%s\n", userUsage, fs.FlagUsages(), notProtection) }
	fs.StringVar(&o.file, "users", "", "file of users; add and token make it")
	fs.StringVar(&o.role, "role", "", "viewer, operator or engineer")
	fs.StringVar(&o.passwordFile, "password-file", "", "file with the password (default: asked for, or the first line of standard input)")
	fs.BoolVar(&o.json, "json", false, "list as JSON")
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	if err := o.check(rest); err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch user:", err)
		return 2
	}
	if err := o.do(rest, os.Stdin, stdout, stderr); err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch user:", err)
		return 1
	}
	return 0
}

// check finds what cannot be meant.
func (o *userOptions) check(args []string) error {
	if len(args) == 0 {
		return errors.New("say what to do: list, add, set-password, token or remove (--help says more)")
	}
	names := 1
	needsRole := false
	switch args[0] {
	case "list":
		names = 0
	case "add", "token":
		needsRole = true
	case "set-password", "remove":
	default:
		return fmt.Errorf("there is no %q: list, add, set-password, token or remove (--help says more)", args[0])
	}
	switch _, ok := access.ParseRole(o.role); {
	case len(args)-1 != names:
		return fmt.Errorf("%s: %d names were given, %d is needed", args[0], len(args)-1, names)
	case o.file == "":
		return errors.New("name the file by --users FILE")
	case needsRole && !ok:
		return fmt.Errorf("--role %q: give viewer, operator or engineer", o.role)
	case !needsRole && o.role != "":
		return fmt.Errorf("%s takes no --role: remove the user and add it again", args[0])
	case o.passwordFile != "" && args[0] != "add" && args[0] != "set-password":
		return fmt.Errorf("%s takes no --password-file", args[0])
	}
	return nil
}

func (o *userOptions) do(args []string, stdin *os.File, stdout, stderr io.Writer) error {
	users, err := readUsers(o.file)
	if errors.Is(err, fs.ErrNotExist) && (args[0] == "add" || args[0] == "token") {
		users, err = &access.Users{}, nil
	}
	if err != nil {
		return err
	}
	role, _ := access.ParseRole(o.role)
	token := ""
	switch args[0] {
	case "list":
		return o.list(users, stdout)
	case "add", "set-password":
		var password string
		if password, err = o.password(stdin, stderr); err != nil {
			return err
		}
		if args[0] == "add" {
			err = users.Add(args[1], role, password)
		} else {
			err = users.SetPassword(args[1], password)
		}
	case "token":
		token, err = users.AddMachine(args[1], role)
	case "remove":
		err = users.Remove(args[1])
	}
	if err == nil {
		err = writeUsers(o.file, users)
	}
	if err == nil && token != "" {
		_, _ = fmt.Fprintln(stdout, token)
	}
	return err
}

func (o *userOptions) list(users *access.Users, stdout io.Writer) error {
	type line struct {
		Name string      `json:"name"`
		Role access.Role `json:"role"`
		Kind string      `json:"kind"`
	}
	lines := []line{}
	for _, u := range users.List() {
		kind := "person"
		if u.Machine() {
			kind = "machine"
		}
		lines = append(lines, line{u.Name, u.Role, kind})
	}
	if o.json {
		enc := json.NewEncoder(stdout)
		enc.SetIndent("", "  ")
		return enc.Encode(lines)
	}
	for _, l := range lines {
		_, _ = fmt.Fprintf(stdout, "%-8s  %-7s  %s\n", l.Role, l.Kind, l.Name)
	}
	return nil
}

// password gets a new password: from the file, twice from a terminal without
// showing it, or from the first line of standard input.
func (o *userOptions) password(stdin *os.File, stderr io.Writer) (string, error) {
	if o.passwordFile != "" {
		return readSecret(o.passwordFile)
	}
	fd := int(stdin.Fd())
	if !term.IsTerminal(fd) {
		line, err := bufio.NewReader(io.LimitReader(stdin, 1<<10)).ReadString('\n')
		if err != nil && !errors.Is(err, io.EOF) {
			return "", fmt.Errorf("password from standard input: %w", err)
		}
		return strings.TrimRight(line, "\r\n"), nil
	}
	var got [2]string
	for i, prompt := range []string{"Password: ", "Again: "} {
		_, _ = fmt.Fprint(stderr, prompt)
		b, err := term.ReadPassword(fd)
		_, _ = fmt.Fprintln(stderr)
		if err != nil {
			return "", fmt.Errorf("password: %w", err)
		}
		got[i] = string(b)
	}
	if got[0] != got[1] {
		return "", errors.New("the two passwords differ: nothing was changed")
	}
	return got[0], nil
}

// readUsers reads a users file; it must not be open to everybody.
func readUsers(path string) (*access.Users, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, fmt.Errorf("users file: %w", err)
	}
	if err := closedToOthers(info); err != nil {
		return nil, fmt.Errorf("users file %s: %w", path, err)
	}
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("users file: %w", err)
	}
	users, err := access.Parse(text)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return users, nil
}

// writeUsers replaces a users file in one step; owner and mode stay.
func writeUsers(path string, users *access.Users) error {
	text, err := users.Marshal()
	if err != nil {
		return err
	}
	mode := fs.FileMode(0o600)
	owner, group := -1, -1
	if info, err := os.Stat(path); err == nil {
		mode = info.Mode().Perm()
		owner, group = ownerOf(info)
	}
	temp := path + ".new"
	if err := os.Remove(temp); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("users file: %w", err)
	}
	f, err := os.OpenFile(temp, os.O_CREATE|os.O_EXCL|os.O_WRONLY, mode)
	if err != nil {
		return fmt.Errorf("users file: %w", err)
	}
	_, err = f.Write(text)
	if owner >= 0 {
		err = errors.Join(err, f.Chown(owner, group))
	}
	if err = errors.Join(err, f.Sync(), f.Close()); err == nil {
		err = os.Rename(temp, path)
	}
	if err != nil {
		return fmt.Errorf("users file: %w", err)
	}
	return nil
}
