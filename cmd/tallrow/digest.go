package main

import (
	"bytes"
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"unicode/utf8"

	"github.com/spf13/cobra"

	"github.com/tallrow/tallrow/accum"
	"github.com/tallrow/tallrow/accum/digest"
	"github.com/tallrow/tallrow/stream"
	"github.com/tallrow/tallrow/vcov"
)

func newDigest(a *app) *cobra.Command {
	cmd := &cobra.Command{
		Use:   "digest [MODEL.toml] DATA... -o DIGEST",
		Short: "read the data once and keep the sums that a fit needs, in a small file",
		Long: `A digest answers later questions without the data: fit takes digests in place of data, alone or many
together (the days of a month, the parts of one run), with terms left out, another outcome among the
columns kept, or another kind of errors that its sums allow. --errors says what they must allow.`,
		Example: `  tallrow digest quay.toml day-05.parquet -o day-05.digest
  tallrow digest quay.toml big/*.parquet --part 3/8 -o part-3.digest`,
	}
	cmd.DisableFlagsInUseLine = true
	addOptions(cmd, onDigest)
	cmd.RunE = func(cmd *cobra.Command, args []string) error {
		s, err := settingsFor(cmd, args, onDigest)
		if err != nil {
			return err
		}
		if err := s.checkModel(); err != nil {
			return err
		}
		if err := s.needData(cmd); err != nil {
			return err
		}
		if err := s.needOutput("digest"); err != nil {
			return err
		}
		work := a.digest
		if s.given("at") {
			if s.frameFrom != "" {
				return stream.Usef("--frame-from and --at do not go together: the frame is that of the first round")
			}
			work = a.secondRound
		}
		made, err := work(cmd.Context(), s)
		if err != nil {
			return err
		}
		if err := a.tellDigest(s, made); err != nil || made.done == nil {
			return err
		}
		return made.done()
	}
	return cmd
}

// needOutput asks for a file that can be written.
func (s *settings) needOutput(what string) error {
	if !s.given("output") || s.output == "" {
		return stream.Usef("no place for the %s: give it a name, such as -o unloading.digest", what)
	}
	st, err := os.Stat(filepath.Dir(s.output))
	if err != nil || !st.IsDir() {
		return stream.Usef("%s %s: the folder does not exist", s.origin("output"), s.output)
	}
	if st, err := os.Stat(s.output); err == nil && !st.Mode().IsRegular() {
		return stream.Usef("%s %s: is not a plain file", s.origin("output"), s.output)
	}
	return nil
}

// made says what a digest holds, for people and programs.
type made struct {
	Format  string       `json:"format"`
	Output  *string      `json:"output"` // null if nothing was written
	Bytes   int64        `json:"bytes"`
	Rows    vcov.Rows    `json:"rows"`
	Model   digest.Model `json:"model"`
	Sums    []string     `json:"sums"`
	Second  bool         `json:"second_round"`
	Later   []string     `json:"later"` // kinds asked for that take a second round
	Frames  int          `json:"frames"`
	Digests int          `json:"digests,omitempty"` // that were joined
	Runs    []madeRun    `json:"runs"`

	done func() error // see prepared
}

type madeRun struct {
	ID      string `json:"id"`
	Parts   int    `json:"parts"`
	Have    []int  `json:"have"`
	Missing []int  `json:"missing"`
	Files   int    `json:"files"`
}

func describeDigest(m *digest.Meta, name string, size int64) *made {
	d := &made{Format: "tallrow-pool/1", Bytes: size, Model: m.Model, Runs: []madeRun{}, Later: []string{}}
	if h := m.Header; h != nil {
		d.Sums, d.Frames = sumsOf(m), len(h.Sections)
		d.Rows = vcov.Rows{Read: h.Read, Used: h.Tally.Used, Missing: h.Tally.Missing, Excluded: h.Tally.Excluded, Malformed: h.Malformed, ZeroWeight: h.Tally.ZeroWeight, MissingBy: h.Tally.MissingBy}
	} else {
		d.Sums, d.Second = secondNames(m), true
		d.Rows.Read = m.Second.Header.Read
	}
	if name != "" {
		d.Output = &name
	}
	if d.Rows.MissingBy == nil {
		d.Rows.MissingBy = map[string]int64{}
	}
	for _, r := range m.Runs {
		q := madeRun{ID: r.ID, Parts: r.Parts, Have: r.Have, Missing: r.Missing(), Files: len(r.Files)}
		if q.Missing == nil {
			q.Missing = []int{}
		}
		d.Runs = append(d.Runs, q)
	}
	return d
}

// sumsOf lists the kinds of errors that a digest allows.
func sumsOf(m *digest.Meta) []string {
	list := []string{"classical"}
	if m.Header.Fourth {
		list = append(list, "hc1")
	}
	for _, k := range m.Header.Clusters {
		if k < len(m.Model.Keys) {
			list = append(list, "cr1("+m.Model.Keys[k]+")")
		} else if k-len(m.Model.Keys) < len(m.Model.Crossed) {
			var names []string
			for _, c := range m.Model.Crossed[k-len(m.Model.Keys)] {
				names = append(names, m.Model.Keys[c])
			}
			list = append(list, "cr1("+strings.Join(names, ", ")+")")
		}
	}
	return list
}

func (a *app) tellDigest(s *settings, m *made) error {
	if s.json {
		text, err := jsonLine(m)
		if err != nil {
			return err
		}
		_, err = a.stdout.Write(text)
		return err
	}
	var b strings.Builder
	fmt.Fprintf(&b, "%s: %s", s.output, sizeText(m.Bytes))
	if m.Digests > 0 {
		fmt.Fprintf(&b, ", joined from %s", plural(int64(m.Digests), "digest", "digests"))
	}
	fmt.Fprintf(&b, "\nrows: %s read", count(m.Rows.Read))
	if !m.Second {
		fmt.Fprintf(&b, ", %s used", count(m.Rows.Used))
	}
	for _, x := range []struct {
		n    int64
		what string
	}{{m.Rows.Missing, "with a missing cell"}, {m.Rows.Excluded, "excluded"}, {m.Rows.Malformed, "malformed"}, {m.Rows.ZeroWeight, "of zero weight"}} {
		if x.n > 0 {
			fmt.Fprintf(&b, ", %s %s", count(x.n), x.what)
		}
	}
	fmt.Fprintf(&b, "\nmodel: %s on %s", m.Model.Outcome, strings.Join(m.Model.Terms, ", "))
	if len(m.Model.Kept) > 0 {
		fmt.Fprintf(&b, "; kept beside: %s", strings.Join(m.Model.Kept, ", "))
	}
	if m.Second {
		fmt.Fprintf(&b, "\nsecond round: %s; give it to fit beside the digests of the first\n", strings.Join(m.Sums, ", "))
	} else {
		fmt.Fprintf(&b, "\nanswers: %s\n", strings.Join(m.Sums, ", "))
	}
	if len(m.Later) > 0 {
		fmt.Fprintf(&b, "after a second round (--at): %s\n", strings.Join(m.Later, ", "))
	}
	for _, r := range m.Runs {
		if r.Parts > 1 && len(r.Missing) > 0 {
			fmt.Fprintf(&b, "parts: %d of %d; pool joins them with the others\n", len(r.Have), r.Parts)
		}
	}
	_, err := io.WriteString(a.stdout, b.String())
	return err
}

// digest reads the data and writes the sums.
func (a *app) digest(ctx context.Context, s *settings) (*made, error) {
	if s.first > 0 && s.parts > 1 {
		return nil, stream.Usef("--first and --part do not go together")
	}
	hide, by, err := s.hiding()
	if err != nil {
		return nil, err
	}
	if err := refuseDigests(ctx, s.data, "joins digests: tallrow pool"); err != nil {
		return nil, err
	}
	p, err := a.prepare(ctx, s)
	if err != nil {
		return nil, err
	}
	defer p.src.Close()
	if info := p.src.Info(); s.parts > 1 && (!info.Rewindable || !info.Sampled) {
		return nil, stream.Usef("--part: this input cannot be read in parts; want files that are neither compressed text nor pipes")
	}
	model := digest.NewModel(p.design, p.src.Schema(), len(s.keep))
	if err := a.openCheckpoint(ctx, s, p, "digest", onDigest); err != nil {
		return nil, err
	}
	o := p.opts
	o.Errors = p.req.kinds
	if hide != nil {
		if err := hideKeys(&model, p.design, o.Errors, by); err != nil {
			return nil, err
		}
	}
	sample, arithmetic, err := s.frame(&model)
	if err != nil {
		return nil, err
	}
	if arithmetic != "" {
		o.Arithmetic = arithmetic
	}
	files, err := s.inputFiles(ctx)
	if err != nil {
		return nil, err
	}
	stamp, err := p.src.Stamp()
	if err != nil {
		return nil, err
	}
	w, err := digest.Create(s.output)
	if err != nil {
		return nil, fmt.Errorf("%s %s: %s", s.origin("output"), s.output, plainPathError(err))
	}
	defer a.onExit(w.Abort)()
	parts := max(1, s.parts)
	src := p.src
	if parts > 1 {
		src = stream.Part(src, s.part, parts)
	}
	stop := a.watch(s, o.Meter)
	state, err := vcov.Gather(ctx, src, p.design, o, sample)
	stop()
	if err != nil {
		return nil, err
	}
	defer state.Close()
	m := &digest.Meta{Format: digest.Format, Version: vcov.Version, Model: model, Header: state.Header()}
	if h := m.Header; parts == 1 && h.Read == 0 && h.Unread.Rows == 0 {
		for i := range files {
			files[i].Empty = true
		}
	}
	run := &digest.Run{Parts: parts, Have: []int{s.part}, Files: files}
	content := stamp
	if parts == 1 {
		content += state.Fingerprint
	}
	if parts == 1 && m.Header.Tally.Used > 0 {
		run.Content = state.Fingerprint
	}
	run.ID = hash(model.Fingerprint(), content, fmt.Sprint(parts))
	m.Runs = []*digest.Run{run}
	veil, kinds := hidden(p.design, &model, hide)
	if veil != nil {
		m.Header.Conceal(kinds, veil)
	}
	d, err := s.finish(w, m, state.Records(w.Write, veil))
	if err != nil {
		return nil, err
	}
	d.done = p.done
	_, later, err := vcov.SumsFor(p.design, o)
	if err != nil {
		return nil, err
	}
	for _, k := range later {
		d.Later = append(d.Later, p.req.name(k))
	}
	return d, nil
}

// hidden is hide for the keys of a model that are hidden, with the kinds of all keys;
// nil without.
func hidden(d *stream.Design, m *digest.Model, hide func(accum.Key) string) (accum.Hide, []stream.Kind) {
	if hide == nil {
		return nil, nil
	}
	kinds := make([]stream.Kind, len(d.Keys))
	for i := range kinds {
		kinds[i] = d.Keys[i].Kind
	}
	return func(key int, k accum.Key) (string, bool) { return hide(k), m.Hidden[key] }, kinds
}

// finish completes a digest whose records were written with err.
func (s *settings) finish(w *digest.Writer, m *digest.Meta, err error) (*made, error) {
	if err == nil {
		err = w.Close(m)
	}
	if err != nil {
		return nil, writing(s.output, err)
	}
	st, err := os.Stat(s.output)
	if err != nil {
		return nil, err
	}
	d := describeDigest(m, s.output, st.Size())
	d.Format = "tallrow-digest-made/1"
	return d, nil
}

func writing(name string, err error) error {
	return fmt.Errorf("writing to %s: %s", name, plainPathError(err))
}

func hash(parts ...string) string {
	h := sha256.New()
	for _, p := range parts {
		fmt.Fprintf(h, "%d %s\n", len(p), p)
	}
	return hex.EncodeToString(h.Sum(nil)[:16])
}

// ordersTime reports whether the values of a key are wanted in order of time.
func ordersTime(kinds []vcov.Kind, d *stream.Design, key int) bool {
	return slices.ContainsFunc(kinds, func(k vcov.Kind) bool { return k.Name == "driscoll-kraay" && k.Cluster == key })
}

// hideKeys notes the keys that are hidden: all but the periods of driscoll-kraay, whose
// order in time is wanted.
func hideKeys(m *digest.Model, d *stream.Design, kinds []vcov.Kind, by string) error {
	m.HiddenBy = by
	for i := range m.Hidden {
		m.Hidden[i] = !ordersTime(kinds, d, i)
		for _, c := range d.Categories {
			if m.Hidden[i] && c.KeyColumn.Text == d.Keys[i].Text {
				return stream.Usef("--hide-ids: each(%s) has the values of %s in the names of its coefficients, so they cannot be hidden; leave out that term, or the errors by %s", c.Text, d.Keys[i].Text, d.Keys[i].Text)
			}
		}
	}
	return nil
}

// leastKey is the fewest bytes of a secret.
const leastKey = 32

// hiding returns the keyed hash of a cluster's key, nil without --hide-ids, and what
// identifies the secret.
func (s *settings) hiding() (func(accum.Key) string, string, error) {
	if s.hideIDs == "" {
		if s.given("hide-ids") {
			return nil, "", stream.Usef("--hide-ids: want the name of a file with a secret")
		}
		return nil, "", nil
	}
	secret, err := os.ReadFile(s.hideIDs)
	if err != nil {
		return nil, "", stream.Usef("--hide-ids %s: %s", s.hideIDs, plainPathError(err))
	}
	if len(secret) < leastKey {
		return nil, "", stream.Usef("--hide-ids %s: found %d bytes, want %d or more that nobody can guess (head -c 32 /dev/urandom > %s)", s.hideIDs, len(secret), leastKey, s.hideIDs)
	}
	sum := func(b []byte) string {
		h := hmac.New(sha256.New, secret)
		h.Write(b)
		return hex.EncodeToString(h.Sum(nil)[:16])
	}
	return func(k accum.Key) string {
		b := append([]byte(k.Kind.String()), 0)
		if k.Kind == stream.Text {
			b = append(b, k.Text...)
		} else {
			b = binary.BigEndian.AppendUint64(b, k.Bits)
		}
		return sum(b)
	}, sum([]byte("tallrow hidden ids")), nil
}

// frame takes the frame of another digest.
func (s *settings) frame(m *digest.Model) (*accum.Sample, string, error) {
	if s.frameFrom == "" {
		return nil, "", nil
	}
	r, err := digest.Open(s.frameFrom)
	if err != nil {
		return nil, "", fmt.Errorf("--frame-from %s", err)
	}
	defer r.Close()
	if what := r.Meta.Model.Differs(m); what != "" {
		return nil, "", stream.Usef("--frame-from %s is of another model: %s", s.frameFrom, what)
	}
	if len(r.Meta.Header.Sections) == 0 {
		return nil, "", stream.Usef("--frame-from %s: has no rows and no frame", s.frameFrom)
	}
	most := slices.MaxFunc(r.Meta.Header.Sections, func(a, b *accum.Section) int { return int(a.Rows - b.Rows) })
	arithmetic := "double"
	if most.Extended {
		arithmetic = "extended"
	}
	return &accum.Sample{Frame: most.Frame}, arithmetic, nil
}

// headBytes is how much of each end of a file its checksum covers.
const checkedBytes = 64 << 10

// inputFiles describes the files that are read. None of them may be the output.
func (s *settings) inputFiles(ctx context.Context) ([]digest.File, error) {
	list, err := stream.ListFiles(ctx, s.data)
	if err != nil {
		return nil, err
	}
	to, toErr := os.Stat(s.output)
	var out []digest.File
	for _, f := range list {
		if in, err := os.Stat(f.Path); err == nil && toErr == nil && os.SameFile(in, to) {
			return nil, stream.Usef("%s %s: would write over the data", s.origin("output"), s.output)
		}
		d := digest.File{Path: f.Path, Size: f.Size, Time: f.Time}
		if f.Size >= 0 {
			if abs, err := filepath.Abs(f.Path); err == nil {
				d.Path = abs
			}
			if d.Checksum, err = endsSum(f.Path, f.Size); err != nil {
				return nil, err
			}
			d.Empty = !s.noHeader && f.Size <= checkedBytes && noSecondLine(f.Path)
		}
		out = append(out, d)
	}
	return out, nil
}

// noSecondLine reports whether a file is a text without a second line.
func noSecondLine(name string) bool {
	b, err := os.ReadFile(name)
	if err != nil || !utf8.Valid(b) || bytes.HasPrefix(b, []byte("PAR1")) {
		return false // compressed, or no text
	}
	i := bytes.IndexByte(b, '\n')
	return i < 0 || i == len(b)-1
}

// endsSum is the SHA-256 of the ends of a file.
func endsSum(name string, size int64) (string, error) {
	f, err := os.Open(name)
	if err != nil {
		return "", err
	}
	defer f.Close()
	h := sha256.New()
	if _, err := io.Copy(h, io.NewSectionReader(f, 0, min(size, checkedBytes))); err != nil {
		return "", err
	}
	if _, err := io.Copy(h, io.NewSectionReader(f, max(checkedBytes, size-checkedBytes), checkedBytes)); err != nil {
		return "", err
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}
