package main

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"
)

func newPlan(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "plan [MODEL.toml] DATA...",
		Short: "say how a fit would go: columns, passes, memory, cost, and why",
		Long: `Nothing is fitted; only the head of the data and a sample are read. With -o the plan is written as JSON
for --plan of fit, which then reads in the same way and refuses another model or other data.`,
		Example: `  tallrow plan --outcome minutes --terms "pallets, each(barge)" --errors "hc3, cr1(quay)" unloading.parquet`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onPlan)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onPlan)
		if err != nil {
			return err
		}
		if err := refuseDigests(cmd.Context(), s.data, "answers from it needs no plan: tallrow fit"); err != nil {
			return err
		}
		if err := s.checkModel(); err != nil {
			return err
		}
		if err := s.needData(cmd); err != nil {
			return err
		}
		out, err := a.openSink(s)
		if err != nil {
			return err
		}
		p, plan, err := a.makePlan(cmd.Context(), s)
		if err != nil {
			return err
		}
		defer p.src.Close()
		pf, err := newPlanFile(cmd.Context(), p, plan)
		if err != nil {
			return err
		}
		// A written plan is for the program, so it is JSON.
		if !s.json && out.file == nil {
			return out.write([]byte(renderPlan(pf, out.width())))
		}
		text, err := jsonLine(pf)
		if err != nil {
			return err
		}
		return out.write(text)
	}
	return cmd
}

// renderPlan writes a plan for a reader.
func renderPlan(pf *planFile, width int) string {
	width = min(max(width, narrowest), widest)
	var b strings.Builder
	n := notes{&b, width}
	for _, l := range wrap(fmt.Sprintf("Plan for %s explained by %s.", pf.Model.Outcome, plural(int64(len(pf.Terms)), "term", "terms")), width) {
		b.WriteString(l + "\n")
	}
	b.WriteByte('\n')
	n.add("input", inputText(pf.Input))
	if pf.Unread.Segments > 0 {
		n.add("", unreadText(pf.Unread, int64(pf.Input.Segments)))
	}
	var used []string
	for _, c := range pf.Columns {
		if c.Used {
			used = append(used, oneLine(c.Name)+" "+c.Kind)
		}
	}
	n.add("columns", fmt.Sprintf("%s; %d of %d are read", strings.Join(used, ", "), len(used), len(pf.Columns)))
	n.add("terms", strings.Join(oneLines(pf.Terms), ", "))
	n.add("errors", strings.Join(oneLines(pf.Model.Errors), ", "))
	n.add("route", fmt.Sprintf("%s: %s, %s, %s", plural(int64(pf.Passes), "pass", "passes"), pf.Route, arithmeticText(pf.Arithmetic), plural(int64(pf.Workers), "worker", "workers")))
	memory := fmt.Sprintf("about %s of %s", sizeText(pf.Memory), sizeText(pf.Bound))
	if len(pf.Model.Cluster) > 0 && pf.PerCluster > 0 {
		memory += fmt.Sprintf("; %s more for each cluster, and beyond %s sorted runs on scratch", sizeText(pf.PerCluster), sizeText(pf.Clusters))
	}
	if pf.PerLevel > 0 {
		memory += fmt.Sprintf("; %s more for each level of a category and worker", sizeText(pf.PerLevel))
	}
	if pf.PerPair > 0 {
		memory += fmt.Sprintf(", %s for each pair of levels of two categories", sizeText(pf.PerPair))
	}
	if pf.PerUnique > 0 {
		memory += fmt.Sprintf("; %s for each unique row", sizeText(pf.PerUnique))
	}
	n.add("memory", memory)
	size := "about " + sizeText(pf.Digest)
	if pf.DigestPerCluster > 0 {
		size += fmt.Sprintf(", and %s for each cluster", sizeText(pf.DigestPerCluster))
	}
	if pf.Digest > 0 {
		n.add("digest", size+", if the sums are kept (tallrow digest)")
	}
	var costs []string
	for _, c := range pf.Costs {
		costs = append(costs, fmt.Sprintf("%s %s", c.What, percent(c.Share)))
	}
	if len(costs) > 0 {
		n.add("cost", strings.Join(costs, ", "))
	}
	for i, r := range pf.Reasons {
		key := "why"
		if i > 0 {
			key = ""
		}
		n.add(key, oneLine(r))
	}
	return b.String()
}

func arithmeticText(word string) string {
	if word == "auto" {
		word = "double or extended"
	}
	return word + " arithmetic"
}

func inputText(in planInput) string {
	t := plural(int64(in.Files), "file", "files") + " (" + in.Format + ")"
	if in.Bytes >= 0 {
		t += ", " + sizeText(in.Bytes)
	}
	if in.Rows >= 0 {
		t += ", " + plural(in.Rows, "row", "rows")
	} else {
		t += ", number of rows not known before reading"
	}
	if in.Segments >= 0 {
		t += ", " + plural(int64(in.Segments), "segment", "segments")
	}
	return t
}
