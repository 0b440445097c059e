package main

import (
	"context"
	"flag"
	"fmt"
	"io"
	"slices"
	"strings"

	"sockline/testdata/scenes"
)

// What shells complete, and what the manual pages say, comes from the table of
// commands: a new flag is in all of them without another line here.

func completionCommand() command {
	return command{
		name: "completion", summary: "print what completes the commands and flags in bash, zsh or fish", operands: "bash|zsh|fish",
		setup: func(*flag.FlagSet) action {
			return func(_ context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one shell: %s", strings.Join(shells(), ", "))
				}
				var text string
				switch operands[0] {
				case "bash":
					text = bashCompletion()
				case "zsh":
					text = zshCompletion()
				case "fish":
					text = fishCompletion()
				default:
					return usagef("%q is not a shell that this program knows: %s", operands[0], strings.Join(shells(), ", "))
				}
				_, err := io.WriteString(p.stdout, text)
				return err
			}
		},
	}
}

// shells are those that the program writes completions for.
func shells() []string { return []string{"bash", "zsh", "fish"} }

// option is one flag of a command, as shells and manuals need it.
type option struct {
	name  string   // without dashes
	value string   // the word for its value in the usage text; empty for a switch
	help  string   // one line
	words []string // what its value may be, where that is a short list
	kind  valueKind
}

// valueKind is what a shell can offer for the value of a flag.
type valueKind int

const (
	noValueHere   valueKind = iota // a switch
	anyWord                        // something that no shell can guess
	oneOfWords                     // one of a list
	aFile                          // the path of a file
	aDirectory                     // the path of a directory
	fileOrOneWord                  // one of a list, or the path of a file
)

// options are the flags of a command in the order of the usage text.
func options(c command) []option {
	fs := newFlagSet(c)
	c.setup(fs)
	var all []option
	fs.VisitAll(func(f *flag.Flag) {
		value, help := flag.UnquoteUsage(f)
		o := option{name: f.Name, value: value, help: help, kind: anyWord}
		switch {
		case value == "":
			o.kind = noValueHere
		case f.Name == "output":
			o.kind, o.words = oneOfWords, []string{"text", "json"}
		case f.Name == "scene":
			o.kind, o.words = fileOrOneWord, scenes.Names()
		case value == "FILE":
			o.kind = aFile
		case value == "DIR", value == "DIRECTORY":
			o.kind = aDirectory
		}
		all = append(all, o)
	})
	return all
}

// operandWords are the operands of a command, where they come from a list.
func operandWords(c command) []string {
	if strings.Contains(c.operands, "|") && !strings.Contains(c.operands, " ") {
		return strings.Split(c.operands, "|")
	}
	return nil
}

// firstWords are the words that a command line may begin with, in the order of
// the table, each with its summary; a word that several commands share has
// theirs, as many as there are.
func firstWords() (words []string, summary map[string]string) {
	summary = map[string]string{}
	for _, c := range commands() {
		word, second, two := strings.Cut(c.name, " ")
		about := c.summary
		if two {
			about = second + ": " + c.summary
		}
		if before, seen := summary[word]; seen {
			summary[word] = before + "; " + about
			continue
		}
		words = append(words, word)
		summary[word] = about
	}
	return append(words, "help"), addHelp(summary)
}

func addHelp(summary map[string]string) map[string]string {
	summary["help"] = "explain a command"
	return summary
}

// secondWords are the commands that begin with this word and have another.
func secondWords(first string) (all []command) {
	for _, c := range commands() {
		if strings.HasPrefix(c.name, first+" ") {
			all = append(all, c)
		}
	}
	return all
}

// doubled are the words that never stand alone.
func doubled() []string {
	words, _ := firstWords()
	return slices.DeleteFunc(words, func(w string) bool { return len(secondWords(w)) == 0 })
}

// bashCompletion is a script for bash 4 or newer. It asks for nothing but the
// shell itself.
func bashCompletion() string {
	var b strings.Builder
	words, _ := firstWords()
	fmt.Fprintf(&b, `# bash completion for sockline; made by "sockline completion bash".

_sockline() {
	local cur=${COMP_WORDS[COMP_CWORD]} prev=${COMP_WORDS[COMP_CWORD-1]} command
	# bash takes --flag=value apart at the sign.
	if [[ $cur == = ]]; then
		cur=
	elif [[ $prev == = ]]; then
		prev=${COMP_WORDS[COMP_CWORD-2]}
	fi
	COMPREPLY=()
	if ((COMP_CWORD == 1)); then
		_sockline_words %q
		return
	fi
	command=${COMP_WORDS[1]}
	if [[ $command == help ]]; then
		if ((COMP_CWORD == 2)); then _sockline_words %[1]q; fi
		return
	fi
	case $command in
`, strings.Join(words, " "))
	for _, w := range doubled() {
		var second []string
		for _, c := range secondWords(w) {
			second = append(second, strings.Fields(c.name)[1])
		}
		fmt.Fprintf(&b, "\t%s)\n\t\tif ((COMP_CWORD == 2)); then\n\t\t\t_sockline_words %q\n\t\t\treturn\n\t\tfi\n"+
			"\t\tcommand=\"$command ${COMP_WORDS[2]}\"\n\t\t;;\n", w, strings.Join(second, " "))
	}
	b.WriteString("\tesac\n\tcase \"$command $prev\" in\n")
	for _, c := range commands() {
		for _, o := range options(c) {
			if o.kind != noValueHere {
				fmt.Fprintf(&b, "\t%q)\n\t\t%s\n\t\treturn\n\t\t;;\n", c.name+" --"+o.name, bashValue(o))
			}
		}
	}
	b.WriteString("\tesac\n\tcase $command in\n")
	for _, c := range commands() {
		var offer []string
		for _, o := range options(c) {
			offer = append(offer, "--"+o.name)
		}
		offer = append(offer, operandWords(c)...)
		fmt.Fprintf(&b, "\t%q) _sockline_words %q ;;\n", c.name, strings.Join(offer, " "))
	}
	b.WriteString(`	esac
}

_sockline_words() {
	mapfile -t COMPREPLY < <(compgen -W "$1" -- "$cur")
}

_sockline_paths() {
	compopt -o filenames 2>/dev/null
	mapfile -t COMPREPLY < <(compgen "$1" -- "$cur")
}

complete -F _sockline sockline
`)
	return b.String()
}

// bashValue offers the value of a flag.
func bashValue(o option) string {
	words := fmt.Sprintf("_sockline_words %q", strings.Join(o.words, " "))
	switch o.kind {
	case oneOfWords:
		return words
	case aFile:
		return "_sockline_paths -f"
	case aDirectory:
		return "_sockline_paths -d"
	case fileOrOneWord:
		return words + "\n\t\t((${#COMPREPLY[@]})) || _sockline_paths -f"
	}
	return ": # nobody can guess it"
}
