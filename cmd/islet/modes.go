package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"islet/cases"
	"islet/engine"
	"islet/engine/modes"
	"islet/engine/output"
)

// modesOptions are the options of islet modes.
type modesOptions struct {
	at        float64
	against   string
	bandwidth float64
	vary      string
	near      list
	mode      int
	count     int
	all       bool
	export    string
	impedance string
	response  string
	from, to  float64
	points    int
}

func modesFlags(c *call) {
	caseFlags(c)
	m := &c.modes
	c.fs.Float64Var(&m.at, "at", 0, "linearise after a run to this time, `s`, its events included (default: at the operating point)")
	c.fs.StringVar(&m.against, "against", "", "match the modes with those of another setting of detail, `NAME: PATTERN=LEVEL, ...`, applied after --detail")
	c.fs.Float64Var(&m.bandwidth, "bandwidth", 0, "tell which dynamics singular perturbation may drop for a bandwidth of interest, `Hz`")
	c.fs.IntVar(&m.mode, "mode", 0, "tell all who take part in the mode of this `NUMBER` in the table")
	c.fs.StringVar(&m.vary, "vary", "", "root locus over a value of the case, `PATH=FROM:TO[:N]`, and the critical value between; several paths with commas are moved together")
	c.fs.Var(&m.near, "near", "find the modes nearest this frequency, `Hz`, alone; may be repeated (default for systems of more than 700 unknowns: 0, 5, 15, 40, 100 and 300; of more than 5000: 0)")
	c.fs.IntVar(&m.count, "count", 20, "how many modes to find near each frequency")
	c.fs.BoolVar(&m.all, "all", false, "find all modes of a large system too")
	c.fs.StringVar(&m.export, "export", "", "write A, B, C and D in Matrix Market form, and what their rows and columns stand for, into `DIR`")
	c.fs.StringVar(&m.impedance, "impedance", "", "impedance seen at a `BUS` over frequency, dq axes")
	c.fs.StringVar(&m.response, "response", "", "frequency response from a setpoint to a channel, `SETPOINT:CHANNEL` (* matches any run of characters)")
	c.fs.Float64Var(&m.from, "from", 0.1, "lowest frequency of --impedance and --response, `Hz`")
	c.fs.Float64Var(&m.to, "to", 2000, "highest frequency, `Hz`")
	c.fs.IntVar(&m.points, "points", 200, "number of frequencies")
	c.fs.StringVar(&c.out, "out", "", "write modes (CSV, JSON), participation (CSV) and plots into `DIR`")
	c.fs.BoolVar(&c.noPlots, "no-plots", false, "with --out: leave the plots out")
	c.fs.BoolVar(&c.asJSON, "json", false, "print the modes as JSON")
	c.fs.BoolVar(&c.asCSV, "csv", false, "print the modes as CSV")
	c.fs.BoolVar(&c.quiet, "quiet", false, "no progress")
}

// largeSystem is the number of unknowns from which only some modes are found unless
// all are asked for: the time for all grows with the cube.
const largeSystem = 700

// hugeSystem is the number of unknowns from which only the modes nearest zero are
// found unless others are asked for: oscillations of many like devices lie in
// clusters that take ten seconds each at 1000 inverters.
const hugeSystem = 5000

// analysis says which modes are looked for.
func (c *call) analysis(unknowns int) (*modes.Options, error) {
	m := &c.modes
	o := &modes.Options{Count: m.count}
	if m.count < 1 {
		return nil, fmt.Errorf("%w: --count %d: want at least 1", errUsage, m.count)
	}
	for _, s := range m.near {
		hz, err := strconv.ParseFloat(s, 64)
		if err != nil || !(hz >= 0) || math.IsInf(hz, 0) {
			return nil, fmt.Errorf("%w: --near %q: want a frequency in Hz", errUsage, s)
		}
		o.Shifts = append(o.Shifts, complex(1, 2*math.Pi*hz))
	}
	if len(m.near) == 0 && !m.all && unknowns > largeSystem {
		o.Shifts = modes.DefaultShifts()
		if unknowns > hugeSystem {
			o.Shifts = o.Shifts[:1]
		}
	}
	return o, nil
}

// point is a simulation at the moment to linearise.
func (c *call) point(ctx context.Context, k *cases.Case, r []cases.DetailRule) (*engine.Simulation, error) {
	sim, err := k.Start(&engine.Options{Record: []string{}}, r...)
	if err != nil {
		return nil, startError(err)
	}
	if c.modes.at > 0 {
		if _, err := sim.Run(ctx, c.modes.at); err != nil {
			return nil, err
		}
	}
	return sim, nil
}

// conflict tells of options that ask for two different things.
func (m *modesOptions) conflict() error {
	var main, with []string
	for _, o := range []struct {
		name     string
		set, own bool
	}{
		{"--vary", m.vary != "", true}, {"--impedance", m.impedance != "", true}, {"--response", m.response != "", true},
		{"--against", m.against != "", false}, {"--bandwidth", m.bandwidth != 0, false}, {"--export", m.export != "", false},
		{"--mode", m.mode != 0, false},
	} {
		switch {
		case o.set && o.own:
			main = append(main, o.name)
		case o.set:
			with = append(with, o.name)
		}
	}
	if len(main) == 0 || len(main) == 1 && len(with) == 0 {
		return nil
	}
	return fmt.Errorf("%w: %s: each is a study of its own; give one of them alone", errUsage, strings.Join(append(main, with...), ", "))
}

func cmdModes(ctx context.Context, c *call) error {
	m := &c.modes
	if !(m.at >= 0) || math.IsInf(m.at, 0) {
		return fmt.Errorf("%w: --at %g: want a time in s", errUsage, m.at)
	}
	if err := m.conflict(); err != nil {
		return err
	}
	if m.impedance != "" || m.response != "" {
		if !(m.from > 0 && m.to > m.from) || math.IsInf(m.to, 0) || m.points < 2 {
			return fmt.Errorf("%w: --from %g --to %g --points %d: want 0 < from < to and at least 2 points", errUsage, m.from, m.to, m.points)
		}
	}
	k, err := c.openCase()
	if err != nil {
		return err
	}
	base, err := rules(c.details)
	if err != nil {
		return err
	}
	if m.vary != "" {
		return c.locus(ctx, k, base)
	}
	sim, err := c.point(ctx, k, base)
	if err != nil {
		return err
	}
	fmt.Fprintf(c.text(), "%s: %s\n", k.Name, k.Title)
	switch {
	case m.impedance != "":
		return c.impedance(sim)
	case m.response != "":
		return c.response(sim)
	}
	return c.table(ctx, k, sim, base)
}

// sheet adds a picture to the files unless pictures aren't wanted.
func (c *call) sheet(files *[]output.File, s *output.Sheet, err error) error {
	if err != nil || c.noPlots {
		return err
	}
	*files = append(*files, output.File{Name: s.Name + ".svg", Write: s.WriteSVG})
	return nil
}

// impedance prints what is seen at a bus.
func (c *call) impedance(sim *engine.Simulation) error {
	m := &c.modes
	l, err := sim.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
	if err != nil {
		return err
	}
	z, err := modes.BusImpedance(l, m.impedance, modes.LogSpace(m.from, m.to, m.points))
	if err != nil {
		return fmt.Errorf("%w: %w", errUsage, err)
	}
	if err := print(c, z, nil); err != nil {
		return err
	}
	files := []output.File{{Name: "impedance.csv", Write: z.WriteCSV}}
	var curves []output.FrequencyCurve
	for _, e := range []struct {
		name string
		i, j int
	}{{"dd", 0, 0}, {"dq", 0, 1}, {"qd", 1, 0}, {"qq", 1, 1}} {
		h := make([]complex128, len(z.Hz))
		for n := range h {
			h[n] = z.Z[n][e.i][e.j]
		}
		curves = append(curves, output.FrequencyCurve{Name: "Z " + e.name, H: h})
	}
	s, err := output.FrequencyPlot("impedance", "impedance at "+m.impedance, "ohm", z.Hz, curves)
	if err := c.sheet(&files, s, err); err != nil {
		return err
	}
	return c.files(files)
}

// response prints frequency responses from setpoints to channels.
func (c *call) response(sim *engine.Simulation) error {
	m := &c.modes
	in, out, ok := strings.Cut(m.response, ":")
	if !ok {
		return fmt.Errorf("%w: --response %q: want SETPOINT:CHANNEL", errUsage, m.response)
	}
	l, err := sim.Linearise(&engine.LinearOptions{Inputs: []string{in}, Outputs: []string{out}})
	if err != nil {
		return fmt.Errorf("%w: %w", errUsage, err)
	}
	r, err := modes.FrequencyResponse(l, modes.LogSpace(m.from, m.to, m.points))
	if err != nil {
		return err
	}
	if err := print(c, r, nil); err != nil {
		return err
	}
	files := []output.File{{Name: "response.csv", Write: r.WriteCSV}}
	var curves []output.FrequencyCurve
	unit := r.Outputs[0].Unit + " per " + r.Inputs[0].Unit
	for i, w := range r.Outputs {
		for j, u := range r.Inputs {
			h := make([]complex128, len(r.Hz))
			for n := range h {
				h[n] = r.H[n][i][j]
			}
			curves = append(curves, output.FrequencyCurve{Name: u.Name + " to " + w.Name, H: h})
			if unit != w.Unit+" per "+u.Unit {
				unit = "channel's unit per setpoint's"
			}
		}
	}
	s, err := output.FrequencyPlot("response", "response from "+in+" to "+out, unit, r.Hz, curves)
	if err := c.sheet(&files, s, err); err != nil {
		return err
	}
	return c.files(files)
}

// table prints the modes, and what goes with them.
func (c *call) table(ctx context.Context, k *cases.Case, sim *engine.Simulation, base []cases.DetailRule) error {
	m := &c.modes
	o, err := c.analysis(sim.Unknowns())
	if err != nil {
		return err
	}
	signals := &engine.LinearOptions{Inputs: []string{}, Outputs: []string{}}
	if m.export != "" {
		signals = nil
	}
	l, err := sim.Linearise(signals)
	if err != nil {
		return err
	}
	rep, err := modes.Analyse(l, o)
	if err != nil {
		return err
	}
	say := c.text()
	if !rep.All {
		var hz []string
		for _, s := range o.Shifts {
			hz = append(hz, strconv.FormatFloat(imag(s)/(2*math.Pi), 'g', 4, 64))
		}
		fmt.Fprintf(say, "looked for the %d modes nearest %s Hz; --near looks elsewhere, --all for all\n", o.Count, strings.Join(hz, ", and as many nearest "))
	}
	files := []output.File{{Name: "modes.txt", Write: rep.WriteText}, {Name: "modes.csv", Write: rep.WriteCSV},
		{Name: "modes.json", Write: rep.WriteJSON}, {Name: "participation.csv", Write: rep.WriteParticipation}}
	var match *modes.Comparison
	named := []output.NamedReport{{Name: "", Report: rep}}
	if m.against != "" {
		if match, err = c.match(ctx, k, base, rep, o); err != nil {
			return err
		}
		files = append(files, output.File{Name: "match.txt", Write: match.WriteText}, output.File{Name: "match.csv", Write: match.WriteCSV})
		named = []output.NamedReport{{Name: match.NameA, Report: rep}, {Name: match.NameB, Report: match.B}}
	}
	switch {
	case match != nil && (c.asJSON || c.asCSV):
		err = print(c, match, match.WriteJSON)
		for _, w := range match.Warnings {
			fmt.Fprintf(c.stderr, "WARNING: %s\n", w)
		}
	default:
		err = print(c, rep, rep.WriteJSON)
	}
	if err != nil {
		return err
	}
	if m.mode != 0 {
		fmt.Fprintln(say)
		if err := rep.WriteMode(say, m.mode); err != nil {
			return fmt.Errorf("%w: --mode: %w", errUsage, err)
		}
	}
	if m.bandwidth != 0 {
		p, err := rep.Propose(2*math.Pi*m.bandwidth, modes.Separation{})
		if err != nil {
			return fmt.Errorf("%w: --bandwidth %g: %w", errUsage, m.bandwidth, err)
		}
		fmt.Fprintf(say, "\nwhat singular perturbation may drop for a bandwidth of %g Hz, by participation alone; --against shows what that does to the modes:\n", m.bandwidth)
		if err := modes.WriteProposal(say, p); err != nil {
			return err
		}
		files = append(files, output.File{Name: "proposal.csv", Write: func(w io.Writer) error { return modes.WriteProposalCSV(w, p) }})
	}
	if match != nil {
		fmt.Fprintln(say)
		if err := match.WriteText(say); err != nil {
			return err
		}
	}
	s, err := output.Eigenvalues(named...)
	if err := c.sheet(&files, s, err); err != nil {
		return err
	}
	if m.export != "" {
		if err := c.exportMatrices(l); err != nil {
			return err
		}
	}
	if err := c.files(files); err != nil {
		return err
	}
	fmt.Fprintln(say, "\nResults support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
	return nil
}

// match analyses the other setting of --against.
func (c *call) match(ctx context.Context, k *cases.Case, base []cases.DetailRule, rep *modes.Report, o *modes.Options) (*modes.Comparison, error) {
	name, spec, ok := strings.Cut(c.modes.against, ":")
	if !ok {
		return nil, fmt.Errorf("%w: --against %q: want NAME: PATTERN=LEVEL and more of those behind commas", errUsage, c.modes.against)
	}
	extra, err := rules(strings.Split(spec, ","))
	if err != nil {
		return nil, err
	}
	other, err := c.point(ctx, k, append(append([]cases.DetailRule(nil), base...), extra...))
	if err != nil {
		return nil, err
	}
	l, err := other.Linearise(&engine.LinearOptions{Inputs: []string{}, Outputs: []string{}})
	if err != nil {
		return nil, err
	}
	r, err := modes.Analyse(l, o)
	if err != nil {
		return nil, err
	}
	return modes.Match("as given", rep, strings.TrimSpace(name), r, modes.MatchOptions{}), nil
}

// exportMatrices writes the state-space form.
func (c *call) exportMatrices(l *engine.Linear) error {
	dir := c.modes.export
	ss, err := modes.Reduce(l, false)
	if err != nil {
		return err
	}
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return err
	}
	if err := ss.Export(func(name string) (io.WriteCloser, error) { return os.Create(filepath.Join(dir, name)) }); err != nil {
		return err
	}
	fmt.Fprintf(c.text(), "\n%d states, %d inputs, %d outputs written to %s as A.mtx, B.mtx, C.mtx, D.mtx and names.csv\n", len(ss.States), len(ss.Inputs), len(ss.Outputs), dir)
	return nil
}

// text is where explanations go: nowhere if JSON or CSV is asked for.
func (c *call) text() io.Writer {
	if c.asJSON || c.asCSV {
		return io.Discard
	}
	return c.stdout
}

// printable is a result that prints itself.
type printable interface {
	WriteText(w io.Writer) error
	WriteCSV(w io.Writer) error
}

// print prints a result in the form asked for. asJSON is nil where there is none.
func print(c *call, r printable, asJSON func(io.Writer) error) error {
	switch {
	case c.asJSON && asJSON == nil:
		return fmt.Errorf("%w: --json: this result is printed as text or --csv", errUsage)
	case c.asJSON:
		return asJSON(c.stdout)
	case c.asCSV:
		return r.WriteCSV(c.stdout)
	}
	return r.WriteText(c.stdout)
}

// files writes files where --out asks for them.
func (c *call) files(files []output.File) error {
	if c.out == "" {
		return nil
	}
	names, err := output.WriteFiles(c.out, files)
	if err != nil {
		return err
	}
	if !c.asJSON && !c.asCSV {
		fmt.Fprintf(c.stdout, "written to %s: %s\n", c.out, strings.Join(names, ", "))
	}
	return nil
}

// variation is a value of the case that is moved: its paths, and between what.
type variation struct {
	paths    []string
	from, to float64
	n        int
}

// parseVariation reads --vary.
func parseVariation(s string) (v variation, err error) {
	bad := fmt.Errorf("%w: --vary %q: want PATH=FROM:TO or PATH=FROM:TO:N, as device.battery-1.m=1e-5:1e-4:21", errUsage, s)
	paths, span, ok := strings.Cut(s, "=")
	if !ok {
		return v, bad
	}
	for _, p := range strings.Split(paths, ",") {
		if p = strings.TrimSpace(p); p == "" {
			return v, bad
		}
		v.paths = append(v.paths, p)
	}
	parts := strings.Split(span, ":")
	v.n = 21
	if len(parts) < 2 || len(parts) > 3 {
		return v, bad
	}
	if v.from, err = strconv.ParseFloat(strings.TrimSpace(parts[0]), 64); err != nil {
		return v, bad
	}
	if v.to, err = strconv.ParseFloat(strings.TrimSpace(parts[1]), 64); err != nil {
		return v, bad
	}
	if len(parts) == 3 {
		if v.n, err = strconv.Atoi(strings.TrimSpace(parts[2])); err != nil || v.n < 2 || v.n > 10000 {
			return v, bad
		}
	}
	if v.from == v.to || math.IsInf(v.from, 0) || math.IsInf(v.to, 0) || v.from != v.from || v.to != v.to {
		return v, bad
	}
	return v, nil
}

// locus traces the modes over a value of the case and finds where it ceases to be
// stable.
func (c *call) locus(ctx context.Context, k *cases.Case, base []cases.DetailRule) error {
	if c.modes.at > 0 {
		return fmt.Errorf("%w: --vary goes with the operating point, not with --at", errUsage)
	}
	v, err := parseVariation(c.modes.vary)
	if err != nil {
		return err
	}
	ov, err := c.overrides()
	if err != nil {
		return err
	}
	build := func(value float64) (*engine.Simulation, error) {
		all := append([]cases.Override(nil), ov...)
		for _, p := range v.paths {
			all = append(all, cases.Override{Path: p, Value: strconv.FormatFloat(value, 'g', -1, 64)})
		}
		one, err := cases.Open(c.args[0], all...)
		if err != nil {
			return nil, fmt.Errorf("%w: %w", errInput, err)
		}
		return one.Start(&engine.Options{Record: []string{}}, base...)
	}
	first, err := build(v.from)
	if errors.Is(err, errInput) {
		return err
	}
	unknowns := 0
	if err == nil {
		unknowns = first.Unknowns()
	}
	o, err := c.analysis(unknowns)
	if err != nil {
		return err
	}
	var values []float64
	for i := range v.n {
		values = append(values, v.from+(v.to-v.from)*float64(i)/float64(v.n-1))
	}
	l, err := modes.Trace(ctx, values, build, o)
	if err != nil {
		return err
	}
	if err := l.FindEdges(ctx, build, o); err != nil {
		return err
	}
	say := c.text()
	name := strings.Join(v.paths, ", ")
	fmt.Fprintf(say, "%s: %s\nroot locus over %s\n", k.Name, k.Title, name)
	if err := print(c, l, l.WriteJSON); err != nil {
		return err
	}
	if c.asCSV {
		for _, e := range l.Edges {
			fmt.Fprintf(c.stderr, "critical value %.6g\n", e.Value)
		}
	}
	files := []output.File{{Name: "root-locus.txt", Write: l.WriteText}, {Name: "root-locus.csv", Write: l.WriteCSV}, {Name: "root-locus.json", Write: l.WriteJSON}}
	if !c.noPlots {
		s, err := output.RootLocus(name, l)
		if err != nil {
			return err
		}
		files = append(files, output.File{Name: s.Name + ".svg", Write: s.WriteSVG})
	}
	if len(l.Edges) == 0 {
		verdict := "unstable, or without an operating point,"
		if r := l.Points[0].Report; r != nil && r.Stable {
			verdict = "stable"
		}
		fmt.Fprintf(say, "\n%s at all %d values from %g to %g: no critical value between\n", verdict, len(l.Points), v.from, v.to)
	}
	if err := c.files(files); err != nil {
		return err
	}
	fmt.Fprintln(say, "\nResults support, and never replace, local codes, utility requirements and a licensed engineer's judgement.")
	return nil
}
