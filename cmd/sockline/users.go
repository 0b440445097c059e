package main

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"

	"golang.org/x/term"

	"sockline/alerting"
	"sockline/alerting/page/access"
)

// userFlags are the flags that the commands about users have: where the file
// is.
type userFlags struct{ config, file *string }

func defineUserFlags(fs *flag.FlagSet) userFlags {
	return userFlags{configFlag(fs), fs.String("file", "", "users `FILE`, instead of the one that the configuration names")}
}

// path is where the users stand.
func (f userFlags) path() (string, error) {
	if (*f.config == "") == (*f.file == "") {
		return "", usagef("give either --config FILE or --file FILE")
	}
	if *f.file != "" {
		return *f.file, nil
	}
	cfg, err := loadConfig(*f.config)
	if err != nil {
		return "", err
	}
	if cfg.Page.UsersFile == "" {
		return "", fmt.Errorf("%s names no users_file in [page]: add the line there, or give --file", cfg.File)
	}
	return cfg.Page.UsersFile, nil
}

// read reads the users; none if the file is not there yet.
func (f userFlags) read() (path string, users []access.User, err error) {
	if path, err = f.path(); err != nil {
		return "", nil, err
	}
	users, err = access.Read(path)
	if errors.Is(err, fs.ErrNotExist) {
		err = nil
	}
	return path, users, err
}

func usersAddCommand() command {
	return command{
		name: "users add", summary: "add somebody who may log in to the page, or give them another role or password", operands: "NAME",
		setup: func(fs *flag.FlagSet) action {
			flags := defineUserFlags(fs)
			role := fs.String("role", "", "`ROLE`: viewer, tower, officer or administrator")
			return func(_ context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one user")
				}
				name := operands[0]
				if err := access.CheckName(name); err != nil {
					return usagef("%v", err)
				}
				r, err := access.ParseRole(*role)
				if err != nil {
					return usagef("--role: %v", err)
				}
				path, users, err := flags.read()
				if err != nil {
					return err
				}
				password, err := askPassword(p, name)
				if err != nil {
					return err
				}
				u, err := access.New(name, r, password)
				if err != nil {
					return err
				}
				if err := access.Write(path, access.With(users, u)); err != nil {
					return err
				}
				fmt.Fprintf(p.stderr, "%s may log in as %s; a running sockline takes it up within seconds\n", name, r)
				return nil
			}
		},
	}
}

func usersListCommand() command {
	return command{
		name: "users list", summary: "list who may log in to the page, and as what",
		setup: func(fs *flag.FlagSet) action {
			flags := defineUserFlags(fs)
			out := outputFlag(fs)
			return func(_ context.Context, p *program, _ []string) error {
				_, users, err := flags.read()
				if err != nil {
					return err
				}
				return printUsers(p, users, out.json())
			}
		},
	}
}

func usersRemoveCommand() command {
	return command{
		name: "users remove", summary: "remove somebody; their sessions end within seconds", operands: "NAME",
		setup: func(fs *flag.FlagSet) action {
			flags := defineUserFlags(fs)
			return func(_ context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one user")
				}
				path, users, err := flags.read()
				if err != nil {
					return err
				}
				rest, there := access.Without(users, operands[0])
				if !there {
					return fmt.Errorf("there is no user %q in %s; \"sockline users list\" shows who is", operands[0], path)
				}
				if err := access.Write(path, rest); err != nil {
					return err
				}
				fmt.Fprintf(p.stderr, "%s is removed\n", operands[0])
				return nil
			}
		},
	}
}

func printUsers(p *program, users []access.User, asJSON bool) error {
	if !asJSON {
		for _, u := range users {
			fmt.Fprintf(p.stdout, "%-13s  %s\n", u.Role, u.Name)
		}
		fmt.Fprintf(p.stdout, "\n%s\n", alerting.Notice)
		return nil
	}
	type user struct {
		Name string `json:"name"`
		Role string `json:"role"`
	}
	body := struct {
		Users  []user `json:"users"`
		Notice string `json:"notice"`
	}{[]user{}, alerting.Notice}
	for _, u := range users {
		body.Users = append(body.Users, user{u.Name, u.Role.String()})
	}
	return json.NewEncoder(p.stdout).Encode(body)
}

// askPassword asks twice on a terminal, without showing what is typed, and
// reads one line where there is none.
func askPassword(p *program, name string) (string, error) {
	f, ok := p.stdin.(*os.File)
	if !ok || !term.IsTerminal(int(f.Fd())) {
		line, err := bufio.NewReader(io.LimitReader(p.stdin, 4096)).ReadString('\n')
		if err != nil && !errors.Is(err, io.EOF) {
			return "", fmt.Errorf("read the password: %w", err)
		}
		if line = strings.TrimRight(line, "\r\n"); line == "" {
			return "", usagef("write the password to standard input, on one line")
		}
		return line, nil
	}
	ask := func(prompt string) (string, error) {
		fmt.Fprint(p.stderr, prompt)
		text, err := term.ReadPassword(int(f.Fd()))
		fmt.Fprintln(p.stderr)
		if err != nil {
			return "", fmt.Errorf("read the password: %w", err)
		}
		return string(text), nil
	}
	first, err := ask("Password of " + name + ": ")
	if err != nil {
		return "", err
	}
	if err := access.CheckPassword(name, first); err != nil {
		return "", err
	}
	second, err := ask("Once more: ")
	if err != nil {
		return "", err
	}
	if first != second {
		return "", errors.New("the two are not the same; nothing is changed")
	}
	return first, nil
}
