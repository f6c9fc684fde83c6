package main

import (
	_ "embed"

	"github.com/spf13/cobra"
)

//go:embed tallrow-fit-1.schema.json
var resultSchema []byte

func newFit(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "fit [MODEL.toml] DATA...",
		Short: "read the data, fit the model, print it with its errors",
		Long: `DATA are files, globs, folders (names such as quay=7 become columns) or - for standard input;
CSV and TSV, also .gz and .zst, and Parquet. A model file has the options as keys; what the
command line says goes before it.`,
		Example: `  tallrow fit --outcome minutes --terms "pallets, tonnes, each(barge)" --cluster quay unloading.parquet
  zcat days.csv.gz | tallrow fit --outcome "log(minutes)" --terms "log(pallets), wet" --json -`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onFit)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onFit)
		if err != nil {
			return err
		}
		if s.jsonSchema {
			_, err := a.stdout.Write(resultSchema)
			return err
		}
		if len(s.data) == 0 {
			if err := s.checkModel(); err != nil {
				return err
			}
		}
		if err := s.needData(cmd); err != nil {
			return err
		}
		out, err := a.openSink(s)
		if err != nil {
			return err
		}
		if s.eachDigest {
			if err := s.noCheckpoint("does not go with --each-digest: digests are read in moments"); err != nil {
				return err
			}
			x, err := a.eachFit(cmd.Context(), s)
			if err != nil {
				return err
			}
			if !s.json {
				return out.write([]byte(x.render(out.width())))
			}
			text, err := jsonLine(x)
			if err != nil {
				return err
			}
			return out.write(text)
		}
		f, err := a.fit(cmd.Context(), s)
		if err != nil {
			return err
		}
		v := newView(f.res, f.req.names())
		var text []byte
		if !s.json {
			text = []byte(renderText(v, out.width()))
		} else if text, err = jsonLine(v.document()); err != nil {
			return err
		}
		if err := out.write(text); err != nil || f.done == nil {
			return err
		}
		return f.done()
	}
	return cmd
}
