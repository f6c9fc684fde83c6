package main

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"

	"github.com/tallrow/tallrow/stream"
)

// commands makes the commands, in the order of the help.
var commands = []func(*app) *cobra.Command{newFit, newPlan, newColumns, newDigest, newPool, newLaunch}

// The order above is the order of the help.
func init() { cobra.EnableCommandSorting = false }

// execute parses the command line and runs the command.
func (a *app) execute(ctx context.Context, args []string) error {
	root := &cobra.Command{
		Use:               "tallrow",
		Short:             "linear models over data too large for memory, with errors that hold when spread is uneven or rows move together",
		Version:           version,
		SilenceUsage:      true,
		SilenceErrors:     true,
		Args:              cobra.ArbitraryArgs,
		CompletionOptions: cobra.CompletionOptions{DisableDefaultCmd: true},
		RunE: func(cmd *cobra.Command, args []string) error {
			if len(args) == 0 {
				return cmd.Help()
			}
			return stream.Usef("unknown command %q%s; commands are %s", args[0], meant(args[0], commandNames(cmd)), both(commandNames(cmd)))
		},
	}
	root.SetVersionTemplate("tallrow {{.Version}}\n")
	root.SetHelpCommand(&cobra.Command{Hidden: true, Use: "no-help"})
	root.SetHelpFunc(func(cmd *cobra.Command, _ []string) { fmt.Fprint(a.stdout, helpText(cmd)) })
	root.SetFlagErrorFunc(flagError)
	root.SetIn(a.stdin)
	root.SetOut(a.stdout)
	root.SetErr(a.stderr)
	for _, c := range commands {
		root.AddCommand(c(a))
	}
	root.SetArgs(args)
	return root.ExecuteContext(ctx)
}

func commandNames(root *cobra.Command) []string {
	var names []string
	for _, c := range root.Commands() {
		if !c.Hidden {
			names = append(names, c.Name())
		}
	}
	slices.Sort(names)
	return names
}

// flagError puts what pflag found into our words.
func flagError(cmd *cobra.Command, err error) error {
	var gone *pflag.NotExistError
	if errors.As(err, &gone) {
		name := gone.GetSpecifiedName()
		if gone.GetSpecifiedShortnames() != "" {
			return stream.Usef("unknown option -%s", name)
		}
		if optionNamed(name) != nil {
			return stream.Usef("--%s is not an option of %s", name, cmd.Name())
		}
		var known []string
		cmd.Flags().VisitAll(func(f *pflag.Flag) { known = append(known, f.Name) })
		if n := nearest(name, known); n != "" {
			return stream.Usef("unknown option --%s; did you mean --%s?", name, n)
		}
		return stream.Usef("unknown option --%s; tallrow %s --help lists them", name, cmd.Name())
	}
	var bare *pflag.ValueRequiredError
	if errors.As(err, &bare) {
		return stream.Usef("--%s needs a value", bare.GetFlag().Name)
	}
	var bad *pflag.InvalidValueError
	if errors.As(err, &bad) {
		// The inner error is a use error and complete.
		if in := bad.Unwrap(); in != nil && errors.Is(in, stream.ErrUse) {
			return in
		}
		return stream.Usef("--%s: found %q", bad.GetFlag().Name, bad.GetValue())
	}
	return stream.Usef("%s", err)
}

// flagValue is an option on the command line. Values are kept and applied
// after the model file.
type flagValue struct {
	o     *option
	texts []string
}

func (f *flagValue) String() string { return strings.Join(f.texts, ", ") }
func (f *flagValue) Type() string   { return f.o.value }

// Set refuses a second value where one of the two would be ignored.
func (f *flagValue) Set(t string) error {
	if len(f.texts) > 0 && f.o.form != formMany {
		return stream.Usef("--%s is given twice: %q and %q", f.o.name, f.texts[0], t)
	}
	f.texts = append(f.texts, t)
	return nil
}

// IsBoolFlag lets a switch stand alone.
func (f *flagValue) IsBoolFlag() bool { return f.o.form == formSwitch }

// addOptions gives a command its flags.
func addOptions(cmd *cobra.Command, on int) {
	cmd.Flags().SortFlags = false
	for i := range options {
		o := &options[i]
		if o.on&on == 0 {
			continue
		}
		f := cmd.Flags().VarPF(&flagValue{o: o}, o.name, o.short, o.help)
		if o.form == formSwitch {
			f.NoOptDefVal = "true"
		}
	}
}

// settingsFor reads the model file, if the first argument is one, and then the
// command line.
func settingsFor(cmd *cobra.Command, args []string, on int) (*settings, error) {
	s := newSettings()
	if on&onSums != 0 && len(args) > 0 && strings.HasSuffix(args[0], ".toml") {
		if err := readModel(s, args[0], on); err != nil {
			return nil, err
		}
		args = args[1:]
	}
	for _, arg := range args {
		if arg == "" {
			return nil, stream.Usef("found an empty name among the data")
		}
	}
	s.data = args
	var err error
	cmd.Flags().Visit(func(f *pflag.Flag) {
		if fv, ok := f.Value.(*flagValue); ok && err == nil {
			err = s.give(fv.o, value{parts: fv.texts}, "--"+fv.o.name)
		}
	})
	return s, err
}

// needData is asked after the options, so that a wrong option is told first.
func (s *settings) needData(cmd *cobra.Command) error {
	if len(s.data) == 0 {
		return stream.Usef("no data: name files or folders after the options, or - for standard input (tallrow %s --help)", cmd.Name())
	}
	return nil
}
