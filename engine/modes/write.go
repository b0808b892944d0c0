package modes

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"math/cmplx"
	"strconv"
	"strings"
	"unicode/utf8"
)

// printer remembers the first error of a writer.
type printer struct {
	w   io.Writer
	err error
}

func (p *printer) printf(format string, a ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format, a...)
	}
}

// join lists shares of at least one per cent as "inner 62 %, outer 30 %".
func join(list []Share, most int) string {
	var parts []string
	for _, s := range list[:min(most, len(list))] {
		if s.Value >= 0.01 {
			parts = append(parts, fmt.Sprintf("%s %.0f %%", s.Name, 100*s.Value))
		}
	}
	return strings.Join(parts, ", ")
}

// seconds writes a time with its unit.
func seconds(t float64) string {
	switch a := math.Abs(t); {
	case math.IsInf(t, 0):
		return "-"
	case a >= 1:
		return fmt.Sprintf("%.4g s", t)
	case a >= 1e-3:
		return fmt.Sprintf("%.4g ms", 1e3*t)
	}
	return fmt.Sprintf("%.4g us", 1e6*t)
}

// kind names what is special about a mode.
func (m *Mode) kind() string {
	switch {
	case m.Zero:
		return "common turn of " + m.Island + "'s island"
	case m.Neutral:
		return "neutral"
	case real(m.Value) >= 0:
		return "UNSTABLE"
	}
	return ""
}

// WriteText prints the report as an engineer reads it: the verdict, the modes
// in order of falling real part, the timescales.
func (rep *Report) WriteText(w io.Writer) error {
	p := &printer{w: w}
	p.printf("modes at t = %.6g s: %d states", rep.Time, len(rep.States))
	if len(rep.Dependent) > 0 {
		p.printf(", %d of them set by current laws", len(rep.Dependent))
	}
	p.printf("\n")
	switch m := rep.Rightmost(); {
	case m == nil:
		p.printf("no mode to judge\n")
	case rep.Stable && rep.All:
		p.printf("stable; rightmost is %s\n", m)
	case rep.Stable:
		p.printf("all modes found decay; rightmost of them is %s\n", m)
	default:
		p.printf("UNSTABLE: %s\n", m)
	}
	for _, n := range rep.Notes {
		p.printf("note: %s\n", n)
	}
	p.printf("\n")
	scale := make(map[int]string)
	for k, t := range rep.Timescales {
		for _, n := range t.Modes {
			scale[n] = strconv.Itoa(k + 1)
		}
	}
	rows := [][]string{{"mode", "eigenvalue, 1/s", "Hz", "damping", "time const.", "scale", "dynamics", "main participants"}}
	for i := range rep.Modes {
		m := &rep.Modes[i]
		hz, damping, tau := "", "", ""
		if imag(m.Value) != 0 {
			hz = fmt.Sprintf("%.4g", m.Frequency)
		}
		if !m.Zero && !m.Neutral {
			damping, tau = fmt.Sprintf("%.2f %%", 100*m.Damping), seconds(m.TimeConstant)
		}
		who := join(rep.Participants(m, 3, 0.01), 3)
		if who == "" && m.Participation != nil {
			if who = join(m.ByDevice, 3); who == "" && len(m.ByDevice) > 0 {
				who = fmt.Sprintf("spread over %d devices and buses, none above %.2g %%", len(m.ByDevice), 100*m.ByDevice[0].Value)
			}
		}
		switch k := m.kind(); {
		case k != "" && who != "":
			who = k + "; " + who
		case k != "":
			who = k
		}
		rows = append(rows, []string{strconv.Itoa(m.Number), m.value(6), hz, damping, tau, scale[m.Number], join(m.ByDynamics, 2), who})
	}
	p.table(rows, "rrrrrrll")
	if len(rep.Timescales) > 0 {
		p.printf("\n")
		rows := [][]string{{"scale", "magnitudes, 1/s", "modes", "dynamics"}}
		for k, t := range rep.Timescales {
			rows = append(rows, []string{strconv.Itoa(k + 1), fmt.Sprintf("%.4g ... %.4g", t.Slowest, t.Fastest), strconv.Itoa(len(t.Modes)), join(t.ByDynamics, 4)})
		}
		p.table(rows, "rrrl")
	}
	p.printf("\nHz are those of the rotating frame: in the phases a mode shows at the network's frequency plus and minus that.\n")
	return p.err
}

// value prints an eigenvalue, or a pair of them, with some digits.
func (m *Mode) value(digits int) string {
	if imag(m.Value) == 0 {
		return fmt.Sprintf("%.*g", digits, real(m.Value))
	}
	return fmt.Sprintf("%.*g ± j%.*g", digits, real(m.Value), digits, imag(m.Value))
}

// table prints rows of cells, each column as wide as its widest cell, to the
// left (l) or right (r).
func (p *printer) table(rows [][]string, sides string) {
	width := make([]int, len(sides))
	for _, r := range rows {
		for i, c := range r {
			width[i] = max(width[i], utf8.RuneCountInString(c))
		}
	}
	for _, r := range rows {
		var b strings.Builder
		for i, c := range r {
			pad := strings.Repeat(" ", width[i]-utf8.RuneCountInString(c))
			if i > 0 {
				b.WriteString("  ")
			}
			if sides[i] == 'r' {
				b.WriteString(pad + c)
			} else {
				b.WriteString(c + pad)
			}
		}
		p.printf("%s\n", strings.TrimRight(b.String(), " "))
	}
}

// WriteMode prints one mode in full: who takes part in it, by device or bus, by
// kind of dynamics and by state, down to one per cent. The error tells of a number that isn't
// in the report.
func (rep *Report) WriteMode(w io.Writer, number int) error {
	if number < 1 || number > len(rep.Modes) {
		return fmt.Errorf("modes: no mode %d, want 1 to %d", number, len(rep.Modes))
	}
	m := &rep.Modes[number-1]
	p := &printer{w: w}
	p.printf("%s\n", m)
	if !m.Zero && !m.Neutral {
		p.printf("time constant %s, condition %.3g\n", seconds(m.TimeConstant), m.Condition)
	}
	if m.Participation == nil {
		p.printf("no participation: this mode is tied to another zero eigenvalue\n")
		return p.err
	}
	base := func(name string) string {
		for _, u := range rep.States {
			if u.Name == name {
				return u.Dynamics
			}
		}
		return ""
	}
	rows := [][]string{{"part", "of", "is"}}
	for _, g := range []struct {
		what string
		list []Share
	}{{"device or bus", m.ByDevice}, {"dynamics", m.ByDynamics}, {"state", rep.Participants(m, len(rep.States), 0.01)}} {
		for _, s := range g.list {
			if s.Value < 0.01 {
				break
			}
			what := g.what
			if what == "state" && base(s.Name) != "" {
				what += " (" + base(s.Name) + ")"
			}
			rows = append(rows, []string{fmt.Sprintf("%.1f %%", 100*s.Value), s.Name, what})
		}
	}
	p.table(rows, "rll")
	return p.err
}

// WriteProposal prints what singular perturbation may drop.
func WriteProposal(w io.Writer, list []Proposal) error {
	p := &printer{w: w}
	p.printf("%-18s %-5s %s\n", "dynamics", "drop", "why")
	for _, s := range list {
		answer := "no"
		if s.Drop {
			answer = "yes"
		}
		p.printf("%-18s %-5s %s\n", s.Dynamics, answer, s.Reason)
	}
	return p.err
}

// WriteProposalCSV writes a row for every group of dynamics.
func WriteProposalCSV(w io.Writer, list []Proposal) error {
	c := csv.NewWriter(w)
	rows := [][]string{{"dynamics", "drop", "slowest_1/s", "mode", "share_below", "of_mode", "reason"}}
	for _, s := range list {
		rows = append(rows, []string{s.Dynamics, strconv.FormatBool(s.Drop), number(s.Slowest), strconv.Itoa(s.Mode), number(s.Share), strconv.Itoa(s.Of), s.Reason})
	}
	return c.WriteAll(rows)
}

// WriteText prints the modes that two settings share side by side, the first
// of the warnings before them.
func (c *Comparison) WriteText(w io.Writer) error {
	p := &printer{w: w}
	const most = 12
	for i, s := range c.Warnings {
		if i == most {
			p.printf("WARNING: %d more such modes, marked below\n", len(c.Warnings)-i)
			break
		}
		p.printf("WARNING: %s\n", s)
	}
	if len(c.Warnings) > 0 {
		p.printf("\n")
	}
	rows := [][]string{{"mode", c.NameA + ", 1/s", "damping", "", "mode", c.NameB + ", 1/s", "damping", "", "distance", "correlation", ""}}
	for _, k := range c.Pairs {
		a, b := &c.A.Modes[k.A-1], &c.B.Modes[k.B-1]
		mark := ""
		if k.Warning != "" {
			mark = "<== differs"
		}
		rows = append(rows, []string{strconv.Itoa(a.Number), a.value(5), fmt.Sprintf("%.2f %%", 100*a.Damping), "|",
			strconv.Itoa(b.Number), b.value(5), fmt.Sprintf("%.2f %%", 100*b.Damping), "|", fmt.Sprintf("%.3g", k.Distance), fmt.Sprintf("%.3f", k.Correlation), mark})
	}
	p.table(rows, "rrrlrrrlrrl")
	for _, s := range []struct {
		name string
		rep  *Report
		list []int
	}{{c.NameA, c.A, c.OnlyA}, {c.NameB, c.B, c.OnlyB}} {
		if len(s.list) == 0 {
			continue
		}
		p.printf("only in %s:", s.name)
		for i, n := range s.list {
			if i == 12 {
				p.printf(" and %d more", len(s.list)-i)
				break
			}
			p.printf(" %d (%s)", n, s.rep.Modes[n-1].value(5))
		}
		p.printf("\n")
	}
	return p.err
}

// WriteCSV writes a row for every pair, and for every mode without a partner.
func (c *Comparison) WriteCSV(w io.Writer) error {
	out := csv.NewWriter(w)
	rows := [][]string{{"mode_a", "real_a_1/s", "imaginary_a_1/s", "damping_a", "mode_b", "real_b_1/s", "imaginary_b_1/s", "damping_b", "distance", "correlation", "warning"}}
	cells := func(rep *Report, n int) []string {
		if n == 0 {
			return []string{"", "", "", ""}
		}
		m := &rep.Modes[n-1]
		return []string{strconv.Itoa(n), number(real(m.Value)), number(imag(m.Value)), number(m.Damping)}
	}
	for _, k := range c.Pairs {
		rows = append(rows, append(append(cells(c.A, k.A), cells(c.B, k.B)...), number(k.Distance), number(k.Correlation), k.Warning))
	}
	for _, n := range c.OnlyA {
		rows = append(rows, append(append(cells(c.A, n), cells(c.B, 0)...), "", "", ""))
	}
	for _, n := range c.OnlyB {
		rows = append(rows, append(append(cells(c.A, 0), cells(c.B, n)...), "", "", ""))
	}
	return out.WriteAll(rows)
}

// WriteJSON writes the pairs and both reports, without vectors.
func (c *Comparison) WriteJSON(w io.Writer) error {
	type pair struct {
		A           int     `json:"mode_a"`
		B           int     `json:"mode_b"`
		Distance    float64 `json:"distance"`
		Correlation float64 `json:"correlation"`
		Warning     string  `json:"warning,omitempty"`
	}
	out := struct {
		Warnings []string   `json:"warnings"`
		NameA    string     `json:"name_a"`
		NameB    string     `json:"name_b"`
		Pairs    []pair     `json:"pairs"`
		OnlyA    []int      `json:"only_a"`
		OnlyB    []int      `json:"only_b"`
		A        jsonReport `json:"a"`
		B        jsonReport `json:"b"`
	}{append([]string{}, c.Warnings...), c.NameA, c.NameB, []pair{}, append([]int{}, c.OnlyA...), append([]int{}, c.OnlyB...), c.A.json(), c.B.json()}
	for _, k := range c.Pairs {
		out.Pairs = append(out.Pairs, pair(k))
	}
	return writeJSON(w, out)
}

func writeJSON(w io.Writer, v any) error {
	e := json.NewEncoder(w)
	e.SetIndent("", " ")
	return e.Encode(v)
}

func number(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }

// WriteCSV writes a row for every mode.
func (rep *Report) WriteCSV(w io.Writer) error {
	c := csv.NewWriter(w)
	rows := [][]string{{"mode", "real_1/s", "imaginary_1/s", "frequency_Hz", "damping", "time_constant_s", "condition", "kind", "devices", "dynamics", "participants"}}
	for i := range rep.Modes {
		m := &rep.Modes[i]
		rows = append(rows, []string{strconv.Itoa(m.Number), number(real(m.Value)), number(imag(m.Value)), number(m.Frequency),
			number(m.Damping), number(m.TimeConstant), number(m.Condition), m.kind(), join(m.ByDevice, 5), join(m.ByDynamics, 5), join(rep.Participants(m, 5, 0.01), 5)})
	}
	return c.WriteAll(rows)
}

// WriteParticipation writes the participation factors as CSV: a row for every
// state, a column for every mode.
func (rep *Report) WriteParticipation(w io.Writer) error {
	c := csv.NewWriter(w)
	row := []string{"state", "dynamics"}
	for i := range rep.Modes {
		row = append(row, strconv.Itoa(rep.Modes[i].Number))
	}
	if err := c.Write(row); err != nil {
		return err
	}
	for k, u := range rep.States {
		row = append(row[:0], u.Name, u.Dynamics)
		for i := range rep.Modes {
			v := ""
			if p := rep.Modes[i].Participation; p != nil {
				v = strconv.FormatFloat(p[k], 'g', 6, 64)
			}
			row = append(row, v)
		}
		if err := c.Write(row); err != nil {
			return err
		}
	}
	c.Flush()
	return c.Error()
}

// jsonMode is a mode in JSON; infinite values are left out.
type jsonMode struct {
	Mode         int      `json:"mode"`
	Real         float64  `json:"real_1/s"`
	Imaginary    float64  `json:"imaginary_1/s"`
	Frequency    float64  `json:"frequency_Hz"`
	Damping      *float64 `json:"damping,omitempty"`
	TimeConstant *float64 `json:"time_constant_s,omitempty"`
	Condition    *float64 `json:"condition,omitempty"`
	Kind         string   `json:"kind,omitempty"`
	Devices      []Share  `json:"devices"`
	Dynamics     []Share  `json:"dynamics"`
	Participants []Share  `json:"participants"`
}

func finite(v float64) *float64 {
	if math.IsInf(v, 0) || math.IsNaN(v) {
		return nil
	}
	return &v
}

// jsonReport is a report in JSON.
type jsonReport struct {
	Time       float64     `json:"time_s"`
	States     int         `json:"states"`
	Dependent  []string    `json:"dependent,omitempty"`
	All        bool        `json:"all"`
	Stable     bool        `json:"stable"`
	Drift      float64     `json:"drift_1/s"`
	Notes      []string    `json:"notes,omitempty"`
	Modes      []jsonMode  `json:"modes"`
	Timescales []Timescale `json:"timescales"`
}

func (rep *Report) json() jsonReport {
	out := jsonReport{rep.Time, len(rep.States), rep.Dependent, rep.All, rep.Stable, rep.Drift, rep.Notes, []jsonMode{}, rep.Timescales}
	for i := range rep.Modes {
		out.Modes = append(out.Modes, rep.jsonMode(&rep.Modes[i]))
	}
	return out
}

func (rep *Report) jsonMode(m *Mode) jsonMode {
	j := jsonMode{Mode: m.Number, Real: real(m.Value), Imaginary: imag(m.Value), Frequency: m.Frequency,
		TimeConstant: finite(m.TimeConstant), Condition: finite(m.Condition), Kind: m.kind(),
		Devices: m.ByDevice, Dynamics: m.ByDynamics, Participants: rep.Participants(m, 10, 0.01)}
	if !m.Zero {
		j.Damping = &m.Damping
	}
	return j
}

// WriteJSON writes the report without vectors.
func (rep *Report) WriteJSON(w io.Writer) error { return writeJSON(w, rep.json()) }

// WriteCSV writes a row for every value of the parameter and mode: the value,
// real and imaginary part, damping, and the branch it belongs to, from 1; or a
// row that says why there is none.
func (l *Locus) WriteCSV(w io.Writer) error {
	c := csv.NewWriter(w)
	rows := [][]string{{"value", "branch", "real_1/s", "imaginary_1/s", "damping", "error"}}
	for k, p := range l.Points {
		if p.Err != nil {
			rows = append(rows, []string{number(p.Value), "", "", "", "", p.Err.Error()})
			continue
		}
		for b, z := range l.Branches {
			if v := z[k]; !cmplx.IsNaN(v) {
				damping := 0.0
				if v != 0 {
					damping = -real(v) / cmplx.Abs(v)
				}
				rows = append(rows, []string{number(p.Value), strconv.Itoa(b + 1), number(real(v)), number(imag(v)), number(damping), ""})
			}
		}
	}
	return c.WriteAll(rows)
}

// WriteText prints, for every value, the verdict and the rightmost modes, and
// below them the critical values where [Locus.FindEdges] has been.
func (l *Locus) WriteText(w io.Writer) error {
	p := &printer{w: w}
	p.printf("%14s  %-9s %s\n", "value", "verdict", "rightmost")
	for _, k := range l.Points {
		if k.Err != nil {
			p.printf("%14.8g  %-9s %v\n", k.Value, "none", k.Err)
			continue
		}
		verdict := "stable"
		if !k.Report.Stable {
			verdict = "UNSTABLE"
		}
		text := "no mode"
		if m := k.Report.Rightmost(); m != nil {
			text = m.String()
		}
		p.printf("%14.8g  %-9s %s\n", k.Value, verdict, text)
	}
	for _, c := range l.Edges {
		p.printf("\n")
		if p.err == nil {
			p.err = c.WriteText(w)
		}
	}
	return p.err
}

// WriteJSON writes the verdicts, the branches and the critical values.
func (l *Locus) WriteJSON(w io.Writer) error {
	type point struct {
		Value     float64   `json:"value"`
		Stable    bool      `json:"stable"`
		Rightmost *jsonMode `json:"rightmost,omitempty"`
		Error     string    `json:"error,omitempty"`
	}
	type critical struct {
		Value  float64  `json:"value"`
		Stable float64  `json:"stable_at"`
		Beyond float64  `json:"not_at"`
		Lost   string   `json:"lost,omitempty"` // why there is no operating point beyond
		Mode   jsonMode `json:"mode"`
	}
	out := struct {
		Points   []point        `json:"points"`
		Critical []critical     `json:"critical"`
		Branches [][][2]float64 `json:"branches_1/s"`  // real, imaginary part
		Indices  [][]int        `json:"branch_points"` // which of Points each belongs to
	}{[]point{}, []critical{}, [][][2]float64{}, [][]int{}}
	for _, k := range l.Points {
		x := point{Value: k.Value}
		if k.Err != nil {
			x.Error = k.Err.Error()
		} else {
			x.Stable = k.Report.Stable
			if m := k.Report.Rightmost(); m != nil {
				j := k.Report.jsonMode(m)
				x.Rightmost = &j
			}
		}
		out.Points = append(out.Points, x)
	}
	for _, b := range l.Branches {
		var at []int
		var z [][2]float64
		for k, v := range b {
			if !cmplx.IsNaN(v) {
				at, z = append(at, k), append(z, [2]float64{real(v), imag(v)})
			}
		}
		out.Branches, out.Indices = append(out.Branches, z), append(out.Indices, at)
	}
	for _, c := range l.Edges {
		x := critical{Value: c.Value, Stable: c.Stable, Beyond: c.Beyond, Mode: c.Report.jsonMode(&c.Mode)}
		if c.Lost != nil {
			x.Lost = c.Lost.Error()
		}
		out.Critical = append(out.Critical, x)
	}
	return writeJSON(w, out)
}

// WriteText prints the critical value and what happens there.
func (c *Critical) WriteText(w io.Writer) error {
	p := &printer{w: w}
	p.printf("critical value %.6g (stable at %.9g, not at %.9g; %d evaluations)\n", c.Value, c.Stable, c.Beyond, c.Evaluations)
	if c.Lost != nil {
		p.printf("there the operating point is lost: %v\n", c.Lost)
	} else {
		p.printf("there %.6g rad/s (%.4g Hz) crosses the axis; it involves %s\n", imag(c.Mode.Value), c.Mode.Frequency, join(c.Report.Participants(&c.Mode, 4, 0.01), 4))
	}
	return p.err
}

// WriteCSV writes a row for every frequency: magnitude and phase of every pair
// of output and input.
func (r *Response) WriteCSV(w io.Writer) error {
	c := csv.NewWriter(w)
	row := []string{"frequency_Hz"}
	for _, o := range r.Outputs {
		for _, i := range r.Inputs {
			name := o.Name + " / " + i.Name
			row = append(row, fmt.Sprintf("|%s|, (%s)/(%s)", name, o.Unit, i.Unit), fmt.Sprintf("arg %s, deg", name))
		}
	}
	rows := [][]string{row}
	for k, f := range r.Hz {
		row := []string{number(f)}
		for o := range r.Outputs {
			for i := range r.Inputs {
				h := r.H[k][o][i]
				row = append(row, number(cmplx.Abs(h)), number(cmplx.Phase(h)*180/math.Pi))
			}
		}
		rows = append(rows, row)
	}
	return c.WriteAll(rows)
}

// WriteText prints magnitude and phase of one pair of output and input a line.
func (r *Response) WriteText(w io.Writer) error {
	p := &printer{w: w}
	for o, out := range r.Outputs {
		for i, in := range r.Inputs {
			p.printf("%s / %s\n%14s %14s %10s\n", out.Name, in.Name, "Hz", "("+out.Unit+")/("+in.Unit+")", "deg")
			for k, f := range r.Hz {
				h := r.H[k][o][i]
				p.printf("%14.6g %14.6g %10.3f\n", f, cmplx.Abs(h), cmplx.Phase(h)*180/math.Pi)
			}
		}
	}
	return p.err
}

// WriteCSV writes a row for every frequency, real and imaginary parts in ohm.
func (z *Impedance) WriteCSV(w io.Writer) error {
	c := csv.NewWriter(w)
	row := []string{"frequency_Hz"}
	for _, n := range []string{"dd", "dq", "qd", "qq", "above", "below", "coupling"} {
		row = append(row, "Re "+n+" ohm", "Im "+n+" ohm")
	}
	rows := [][]string{row}
	for k, f := range z.Hz {
		m := z.Z[k]
		above, below, coupling := z.Sequence(k)
		row := []string{number(f)}
		for _, v := range []complex128{m[0][0], m[0][1], m[1][0], m[1][1], above, below, coupling} {
			row = append(row, number(real(v)), number(imag(v)))
		}
		rows = append(rows, row)
	}
	return c.WriteAll(rows)
}

// WriteText prints magnitudes and phases.
func (z *Impedance) WriteText(w io.Writer) error {
	p := &printer{w: w}
	p.printf("impedance seen at %s, d axis on the bus voltage, frame at %.6g Hz\n", z.Bus, z.Speed/(2*math.Pi))
	p.printf("%12s %22s %22s %22s %22s\n", "Hz", "dd", "dq", "qd", "qq")
	for k, f := range z.Hz {
		p.printf("%12.6g", f)
		for _, v := range []complex128{z.Z[k][0][0], z.Z[k][0][1], z.Z[k][1][0], z.Z[k][1][1]} {
			p.printf(" %22s", fmt.Sprintf("%.5g ohm, %.2f deg", cmplx.Abs(v), cmplx.Phase(v)*180/math.Pi))
		}
		p.printf("\n")
	}
	return p.err
}
