package main

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"
)

// helpWidth is where help lines are broken.
const helpWidth = 100

// helpText is the help of a command, options grouped as in the table.
func helpText(cmd *cobra.Command) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s: %s\n\n", cmd.CommandPath(), cmd.Short)
	if cmd.HasAvailableSubCommands() {
		for _, c := range cmd.Commands() {
			if !c.Hidden {
				fmt.Fprintf(&b, "  %-10s %s\n", c.Name(), c.Short)
			}
		}
		b.WriteString("\ntallrow COMMAND --help explains one command; --version prints the version.\n")
		return b.String()
	}
	fmt.Fprintf(&b, "  %s\n", cmd.UseLine())
	if cmd.Long != "" {
		b.WriteString("\n" + strings.TrimSpace(cmd.Long) + "\n")
	}
	done := map[string]bool{"help": true}
	for _, g := range groups {
		var lines []string
		for i := range options {
			o := &options[i]
			f := cmd.Flags().Lookup(o.name)
			if o.group != g || f == nil {
				continue
			}
			done[o.name] = true
			help := o.help
			if o.def != "" && o.form != formSwitch {
				help += " (default: " + o.def + ")"
			}
			lines = append(lines, helpLine(o.short, o.name, o.value, help))
		}
		if len(lines) > 0 {
			fmt.Fprintf(&b, "\n%s\n%s", g, strings.Join(lines, ""))
		}
	}
	var rest []string
	cmd.Flags().VisitAll(func(f *pflag.Flag) {
		if !done[f.Name] && !f.Hidden {
			name, usage := pflag.UnquoteUsage(f)
			rest = append(rest, helpLine(f.Shorthand, f.Name, name, usage))
		}
	})
	if len(rest) > 0 {
		fmt.Fprintf(&b, "\nOthers\n%s", strings.Join(rest, ""))
	}
	if cmd.Example != "" {
		b.WriteString("\nExamples\n" + strings.TrimRight(cmd.Example, "\n") + "\n")
	}
	return b.String()
}

// helpLine gives one option, its text wrapped beside it.
func helpLine(short, name, val, help string) string {
	const indent = 30
	head := "  --" + name
	if short != "" {
		head = "  -" + short + ", --" + name
	}
	if val != "" {
		head += " " + val
	}
	var b strings.Builder
	b.WriteString(head)
	at := len(head)
	if at > indent-2 {
		b.WriteByte('\n')
		at = 0
	}
	for i, line := range wrap(help, helpWidth-indent) {
		if i > 0 {
			b.WriteByte('\n')
			at = 0
		}
		b.WriteString(strings.Repeat(" ", indent-at) + line)
	}
	b.WriteByte('\n')
	return b.String()
}

// wrap breaks text at spaces into lines of at most width runes where it can.
func wrap(text string, width int) []string {
	var lines []string
	line, n := "", 0
	for _, w := range strings.Fields(text) {
		m := runes(w)
		if n > 0 && n+1+m > width {
			lines = append(lines, line)
			line, n = "", 0
		}
		if n > 0 {
			line += " "
			n++
		}
		line += w
		n += m
	}
	return append(lines, line)
}
