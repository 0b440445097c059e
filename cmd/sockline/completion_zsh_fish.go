package main

import (
	"fmt"
	"strings"
)

// zshCompletion is a script that works both as a file _sockline in a directory
// of $fpath and when it is sourced after compinit.
func zshCompletion() string {
	var b strings.Builder
	words, summary := firstWords()
	b.WriteString("#compdef sockline\n# zsh completion for sockline; made by \"sockline completion zsh\".\n\n" +
		"_sockline() {\n\tlocal command\n\tlocal -a first\n\tfirst=(\n")
	for _, w := range words {
		fmt.Fprintf(&b, "\t\t%s\n", zshQuote(w+":"+summary[w]))
	}
	b.WriteString("\t)\n\tif (( CURRENT == 2 )); then\n\t\t_describe command first\n\t\treturn\n\tfi\n\tcommand=$words[2]\n" +
		"\tif [[ $command == help ]]; then\n\t\t(( CURRENT == 3 )) && _describe command first\n\t\treturn\n\tfi\n" +
		"\tlocal own=1\n\tlocal -a second\n\tcase $command in\n")
	for _, w := range doubled() {
		fmt.Fprintf(&b, "\t%s)\n\t\tsecond=(\n", w)
		for _, c := range secondWords(w) {
			fmt.Fprintf(&b, "\t\t\t%s\n", zshQuote(strings.Fields(c.name)[1]+":"+c.summary))
		}
		b.WriteString("\t\t)\n\t\tif (( CURRENT == 3 )); then\n\t\t\t_describe command second\n\t\t\treturn\n\t\tfi\n" +
			"\t\tcommand=\"$command $words[3]\"\n\t\town=2\n\t\t;;\n")
	}
	// _arguments looks at the words after the command's own.
	b.WriteString("\tesac\n\twords=(sockline \"${(@)words[own + 2, -1]}\")\n\t(( CURRENT -= own ))\n\tcase $command in\n")
	for _, c := range commands() {
		fmt.Fprintf(&b, "\t%q)\n\t\t_arguments", c.name)
		for _, o := range options(c) {
			fmt.Fprintf(&b, " \\\n\t\t\t%s", zshQuote(zshOption(o)))
		}
		if operands := operandWords(c); operands != nil {
			fmt.Fprintf(&b, " \\\n\t\t\t%s", zshQuote("1:operand:("+strings.Join(operands, " ")+")"))
		}
		b.WriteString("\n\t\t;;\n")
	}
	b.WriteString("\tesac\n}\n\nif [[ ${funcstack[1]} == _sockline ]]; then\n\t_sockline \"$@\"\nelse\n\tcompdef _sockline sockline\nfi\n")
	return b.String()
}

// zshOption is the specification of a flag for _arguments.
func zshOption(o option) string {
	escape := strings.NewReplacer(`\`, `\\`, "[", `\[`, "]", `\]`, ":", `\:`)
	text := "--" + o.name
	if o.kind != noValueHere {
		text += "="
	}
	text += "[" + escape.Replace(o.help) + "]"
	if o.kind == noValueHere {
		return text
	}
	text += ":" + escape.Replace(o.value) + ":"
	switch o.kind {
	case oneOfWords:
		text += "(" + strings.Join(o.words, " ") + ")"
	case aFile:
		text += "_files"
	case aDirectory:
		text += "_files -/"
	case fileOrOneWord:
		text += `{compadd ` + strings.Join(o.words, " ") + `; _files -g "*.scene"}`
	}
	return text
}

// zshQuote is a word of zsh that stands for exactly this text.
func zshQuote(s string) string { return "'" + strings.ReplaceAll(s, "'", `'\''`) + "'" }

// fishCompletion is a script for fish.
func fishCompletion() string {
	var b strings.Builder
	words, summary := firstWords()
	b.WriteString(`# fish completion for sockline; made by "sockline completion fish".

# Whether the words before the cursor are exactly these.
function __sockline_at
    set -l words (commandline -opc)
    set -e words[1]
    test "$words" = "$argv"
end

# Whether the words before the cursor begin with these.
function __sockline_in
    set -l words (commandline -opc)
    set -e words[1]
    test (count $words) -ge (count $argv); or return 1
    test "$words[1..$(count $argv)]" = "$argv"
end

complete -c sockline -f
`)
	for _, at := range []string{"", "help"} {
		for _, w := range words {
			fmt.Fprintf(&b, "complete -c sockline -n '%s' -a %s -d %s\n", strings.TrimSpace("__sockline_at "+at), w, fishQuote(summary[w]))
		}
	}
	for _, w := range doubled() {
		for _, c := range secondWords(w) {
			fmt.Fprintf(&b, "complete -c sockline -n '__sockline_at %s' -a %s -d %s\n", w, strings.Fields(c.name)[1], fishQuote(c.summary))
		}
	}
	for _, c := range commands() {
		for _, o := range options(c) {
			fmt.Fprintf(&b, "complete -c sockline -n '__sockline_in %s' -l %s%s -d %s\n", c.name, o.name, fishValue(o), fishQuote(o.help))
		}
		if operands := operandWords(c); operands != nil {
			fmt.Fprintf(&b, "complete -c sockline -n '__sockline_in %s' -a %s\n", c.name, fishQuote(strings.Join(operands, " ")))
		}
	}
	return b.String()
}

// fishValue says what follows a flag.
func fishValue(o option) string {
	switch o.kind {
	case noValueHere:
		return ""
	case oneOfWords:
		return " -x -a " + fishQuote(strings.Join(o.words, " "))
	case aFile:
		return " -r -F"
	case aDirectory:
		return " -x -a '(__fish_complete_directories)'"
	case fileOrOneWord:
		return " -r -F -a " + fishQuote(strings.Join(o.words, " "))
	}
	return " -x"
}

// fishQuote is a word of fish that stands for exactly this text.
func fishQuote(s string) string {
	return "'" + strings.NewReplacer(`\`, `\\`, "'", `\'`).Replace(s) + "'"
}
