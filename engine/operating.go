package engine

import (
	"errors"
	"fmt"
	"math"
	"sort"
	"strings"

	"islet/solvers"
)

// OperatingPoint tells how the steady state was found.
type OperatingPoint struct {
	Iterations      int  // Newton iterations
	PseudoTransient bool // Newton's method from a flat start failed, and the pseudo-transient came first
	// Drift is the largest rate of change left in the equations that are
	// integrated, per unit of an unknown's base per second, and Worst the
	// unknown concerned: a check that the point is their equilibrium.
	Drift float64
	Worst string
	// Frequencies of the islands, Hz, and the name of each one's leading
	// source.
	Frequencies []float64
	Leaders     []string
}

// OperatingPointError reports that no steady state was found.
type OperatingPointError struct {
	// Worst lists the buses and devices with the largest imbalances left.
	Worst []string
	Err   error
}

func (e *OperatingPointError) Error() string {
	s := "engine: no operating point found"
	if e.Err != nil {
		s += ": " + e.Err.Error()
	}
	if len(e.Worst) > 0 {
		s += "; worst balanced: " + strings.Join(e.Worst, "; ")
	}
	return s
}

func (e *OperatingPointError) Unwrap() error { return e.Err }

// OperatingPoint tells how the start was found.
func (m *Simulation) OperatingPoint() OperatingPoint { return m.point }

// flatVoltages sets every live bus to its rated voltage, with the phase shifts
// and ratios on the way from the island's leading source.
func (m *Simulation) flatVoltages() {
	type edge struct {
		to    int
		ratio complex128
	}
	edges := make([][]edge, len(m.sys.buses))
	for _, d := range m.sys.devices {
		if d.off || !d.connects() {
			continue
		}
		for a, ba := range d.buses {
			for b, bb := range d.buses {
				if a == b {
					continue
				}
				r := complex(m.sys.buses[bb].rated/m.sys.buses[ba].rated, 0)
				if d.ratioed != nil {
					r = d.ratioed.OpenRatio(a, b)
				}
				edges[ba] = append(edges[ba], edge{bb, r})
			}
		}
	}
	seen := make([]bool, len(m.sys.buses))
	for k := range m.topo.islands {
		root := m.sys.devices[m.topo.islands[k].formers[0]].buses[0]
		set := func(b int, v complex128) {
			i := m.net.NodeUnknown(2 * b)
			m.y[i], m.y[i+1] = real(v), imag(v)
			seen[b] = true
		}
		set(root, complex(peakPhase(m.sys.buses[root].rated), 0))
		for queue := []int{root}; len(queue) > 0; queue = queue[1:] {
			b := queue[0]
			i := m.net.NodeUnknown(2 * b)
			v := complex(m.y[i], m.y[i+1])
			for _, e := range edges[b] {
				if !seen[e.to] {
					set(e.to, v*e.ratio)
					queue = append(queue, e.to)
				}
			}
		}
	}
}

// search holds the workspace of the operating point.
type pointSearch struct {
	m             *Simulation
	f, d, trial   []float64
	fw            [][]float64 // per island: the correction for one rad/s of the frame
	dw            []float64   // per island: the correction of the frame's speed
	unit          solvers.Tolerance
	reference     []int // per island: the unknown whose angle is held
	up, down      []float64
	speed, speed0 []float64
}

func (m *Simulation) setSpeed(k int, w float64) {
	is := &m.topo.islands[k]
	is.frame.speed = w
	for _, i := range is.devices {
		if f := m.sys.devices[i].framed; f != nil {
			f.SetFrame(w)
		}
	}
}

// findOperatingPoint finds the steady state of every island with its frequency:
// all derivatives zero in a frame at the unknown speed, the angle of the
// leading source held at zero. Newton's method starts from a flat profile; a
// pseudo-transient (implicit Euler steps that grow as the imbalance falls)
// helps where that fails.
func (m *Simulation) findOperatingPoint() error {
	n := m.net.Dim()
	vec := func() []float64 { return make([]float64, n) }
	s := &pointSearch{m: m, f: vec(), d: vec(), trial: vec(), up: vec(), down: vec(), unit: solvers.Tolerance{Rel: 1, Abs: 1}}
	ni := len(m.topo.islands)
	s.dw, s.speed, s.speed0 = make([]float64, ni), make([]float64, ni), make([]float64, ni)
	for k := range m.topo.islands {
		lead := m.sys.devices[m.topo.islands[k].formers[0]]
		s.reference = append(s.reference, lead.lo+lead.former.AngleUnknown())
		s.fw = append(s.fw, vec())
	}
	s.flat()
	first := s.newton()
	if first != nil {
		s.flat()
		m.point.PseudoTransient = true
		if err := s.pseudoTransient(); err != nil {
			return s.fail(fmt.Errorf("from a flat start: %w; by pseudo-transient: %w", first, err))
		}
		if err := s.newton(); err != nil {
			return s.fail(fmt.Errorf("from a flat start: %w; after the pseudo-transient: %w", first, err))
		}
	}
	return s.verify()
}

func (s *pointSearch) flat() {
	m := s.m
	for i := range m.y {
		m.y[i] = 0
	}
	for k := range m.topo.islands {
		lead := m.sys.devices[m.topo.islands[k].formers[0]]
		v := m.ports[:lead.ports]
		clear(v)
		m.setSpeed(k, lead.former.Speed(m.t, v, m.y[lead.lo:lead.lo+lead.own]))
		if w := m.topo.islands[k].frame.speed; !(w > 0.5*m.sys.nominal && w < 1.5*m.sys.nominal) {
			m.setSpeed(k, m.sys.nominal)
		}
	}
	m.flatVoltages()
	var v []float64
	for _, d := range m.sys.devices {
		if d.off || d.starter == nil {
			continue
		}
		v = append(v[:0], make([]float64, d.ports)...)
		m.net.Ports(d.block, v, m.y)
		d.starter.Guess(m.y[d.lo:d.lo+d.own], m.t, v)
	}
	for k, r := range s.reference {
		// The leading source at angle zero: turn the whole island.
		is := &m.topo.islands[k]
		turn := -m.y[r]
		for _, b := range is.buses {
			turnPair(m.y, m.net.NodeUnknown(2*b), turn)
		}
		for _, i := range is.devices {
			m.sys.devices[i].turn(m.y, turn)
		}
	}
}

// correction factors J at the present point and writes the Newton correction
// of unknowns into s.d and of frame speeds into s.dw. With J singular along
// the common turn of an island, a spring at its reference angle makes it
// regular; as that angle isn't moved by the correction, the spring changes
// nothing.
func (s *pointSearch) correction() error {
	m := s.m
	if err := m.net.Eval(s.f, m.t, m.y); err != nil {
		return err
	}
	if err := m.net.Linearise(m.t, m.y); err != nil {
		return err
	}
	for _, r := range s.reference {
		m.net.Pin(r, 1)
	}
	if err := m.net.Factor(0); err != nil {
		// An unknown that nothing pulls back (a free integrator, the angle
		// of a second source): a small alpha holds it where it is and costs
		// the others next to nothing. Whether the point is an equilibrium
		// is checked at the end in any case.
		const hold = 1e-4 // 1/s
		if m.net.Factor(hold) != nil {
			return err
		}
	}
	for k := range s.reference {
		w := m.topo.islands[k].frame.speed
		dw := 1e-4 * m.sys.nominal
		m.setSpeed(k, w+dw)
		err := m.net.Eval(s.up, m.t, m.y)
		m.setSpeed(k, w-dw)
		err = errors.Join(err, m.net.Eval(s.down, m.t, m.y))
		m.setSpeed(k, w)
		if err != nil {
			return err
		}
		for i := range s.fw[k] {
			s.fw[k][i] = (s.up[i] - s.down[i]) / (2 * dw)
		}
		m.net.Solve(s.fw[k])
	}
	copy(s.d, s.f)
	s.solve(s.d)
	return nil
}

// solve turns a residual into a correction with the matrix factored last.
func (s *pointSearch) solve(d []float64) {
	s.m.net.Solve(d)
	for k, r := range s.reference {
		s.dw[k] = 0
		if a := s.fw[k][r]; a != 0 {
			s.dw[k] = -d[r] / a
		}
		for i, w := range s.fw[k] {
			d[i] += s.dw[k] * w
		}
		d[r] = 0
	}
}

func (s *pointSearch) size(d, y []float64) (float64, int) {
	size, worst := s.m.net.Norm(d, y, y, s.unit)
	for _, w := range s.dw {
		size = math.Max(size, math.Abs(w)/s.m.sys.nominal)
	}
	return size, worst
}

func (s *pointSearch) newton() error {
	const maxIterations = 40
	m := s.m
	damping := 1.0
	var size float64
	var worst int
	for it := range maxIterations {
		m.point.Iterations++
		if err := s.correction(); err != nil {
			return m.named(err)
		}
		size, worst = s.size(s.d, m.y)
		if size != size {
			return fmt.Errorf("%s is not a number", m.unknownName(worst))
		}
		if size < 1e-12 || (it > 0 && size < 1e-10 && damping == 1) {
			s.take(1)
			return nil
		}
		for k := range s.speed0 {
			s.speed0[k] = m.topo.islands[k].frame.speed
		}
		dw := append([]float64(nil), s.dw...)
		copy(s.trial, m.y)
		for damping = math.Min(1, 4*damping); ; damping /= 2 {
			if damping < 1e-4 {
				for k, w := range s.speed0 {
					m.setSpeed(k, w)
				}
				copy(m.y, s.trial)
				if size < 1e-8 {
					return nil
				}
				return fmt.Errorf("newton's method stalls at %s (correction %.3g of its size)", m.unknownName(worst), size)
			}
			for i, d := range s.d {
				m.y[i] = s.trial[i] + damping*d
			}
			for k, w := range s.speed0 {
				m.setSpeed(k, w+damping*dw[k])
			}
			if err := m.net.Eval(s.f, m.t, m.y); err != nil {
				if errors.Is(err, solvers.ErrReject) {
					continue
				}
				return m.named(err)
			}
			s.solve(s.f)
			next, _ := s.size(s.f, m.y)
			if next <= (1-damping/4)*size || (size < 1e-9 && damping == 1) {
				break
			}
		}
	}
	return fmt.Errorf("no convergence in %d iterations, largest correction %.3g of its size at %s", maxIterations, size, m.unknownName(worst))
}

// take applies a fraction of the present correction.
func (s *pointSearch) take(damping float64) {
	m := s.m
	for i, d := range s.d {
		m.y[i] += damping * d
	}
	for k, w := range s.dw {
		m.setSpeed(k, m.topo.islands[k].frame.speed+damping*w)
	}
}

// pseudoTransient takes linearly implicit Euler steps whose size grows as the
// rates of change fall (switched evolution relaxation: W. A. Mulder, B. van
// Leer, J. Comput. Phys. 59, 1985), the frame turning with the leading source.
func (s *pointSearch) pseudoTransient() error {
	m := s.m
	if err := m.net.Initialise(m.t, m.y, true); err != nil {
		return m.named(err)
	}
	const start, most = 1e-4, 600
	h := start
	before := math.NaN()
	for range most {
		for k := range m.topo.islands {
			lead := m.sys.devices[m.topo.islands[k].formers[0]]
			v := m.ports[:lead.ports]
			m.net.Ports(lead.block, v, m.y)
			m.setSpeed(k, lead.former.Speed(m.t, v, m.y[lead.lo:lead.lo+lead.own]))
		}
		if err := m.net.Eval(s.d, m.t, m.y); err != nil {
			return m.named(err)
		}
		if err := m.net.Linearise(m.t, m.y); err != nil {
			return m.named(err)
		}
		if err := m.net.Factor(1 / h); err != nil {
			return m.named(err)
		}
		m.net.Solve(s.d)
		size, worst := m.net.Norm(s.d, m.y, m.y, s.unit)
		if size != size {
			return fmt.Errorf("%s is not a number", m.unknownName(worst))
		}
		f := 1.0
		if size > 0.3 {
			f = 0.3 / size
		}
		for i, d := range s.d {
			m.y[i] += f * d
		}
		rate := size / h
		if h > 1 && size < 1e-6 {
			return nil
		}
		if before == before && rate > 0 {
			h *= math.Min(3, math.Max(0.3, before/rate))
		}
		h = math.Min(math.Max(h, 1e-6), 1e3)
		before = rate
	}
	return errors.New("the rates of change don't fall")
}

// verify makes the algebraic unknowns consistent with the equations that are
// integrated, and measures the rates of change left.
func (s *pointSearch) verify() error {
	m := s.m
	if err := m.net.Initialise(m.t, m.y, true); err != nil {
		return m.named(err)
	}
	if err := m.net.Eval(s.f, m.t, m.y); err != nil {
		return m.named(err)
	}
	alpha := 1e9
	if err := m.net.Linearise(m.t, m.y); err != nil {
		return m.named(err)
	}
	if err := m.net.Factor(alpha); err != nil {
		return m.named(err)
	}
	for i := range s.f {
		if m.net.AlgebraicRow(i) {
			s.f[i] = 0
		}
	}
	m.net.Solve(s.f)
	for i := range s.f {
		s.f[i] *= alpha
	}
	size, worst := m.net.Norm(s.f, m.y, m.y, s.unit)
	m.point.Drift, m.point.Worst = size, m.unknownName(worst)
	for k := range m.topo.islands {
		is := &m.topo.islands[k]
		m.point.Frequencies = append(m.point.Frequencies, is.frame.speed/(2*math.Pi))
		m.point.Leaders = append(m.point.Leaders, m.sys.devices[is.formers[0]].name)
	}
	// A rate of one base value in a thousand seconds is no steady state to
	// the accuracy the start promises.
	if !(size < 1e-3) {
		return s.fail(fmt.Errorf("the point found drifts at %.3g per unit per second at %s: two sources at different frequencies, or a setpoint that moves", size, m.point.Worst))
	}
	return nil
}

// fail names the worst-balanced buses and devices.
func (s *pointSearch) fail(err error) error {
	m := s.m
	e := &OperatingPointError{Err: err}
	if m.net.Eval(s.f, m.t, m.y) != nil {
		return e
	}
	type item struct {
		text string
		size float64
	}
	var buses, devices []item
	for b := range m.sys.buses {
		if m.topo.busOf[b] < 0 {
			continue
		}
		i := m.net.NodeUnknown(2 * b)
		amps := math.Hypot(s.f[i], s.f[i+1])
		buses = append(buses, item{fmt.Sprintf("bus %q: %.4g kVA", m.sys.buses[b].name, 1.5*amps*peakPhase(m.sys.buses[b].rated)/1e3), amps * m.sys.buses[b].rated})
	}
	for _, d := range m.sys.devices {
		if d.off {
			continue
		}
		it := item{}
		for k, u := range d.desc.Unknowns {
			if r := math.Abs(s.f[d.lo+k]) / u.Base; r > it.size || r != r {
				it = item{fmt.Sprintf("device %q, %s", d.name, u.Name), r}
			}
		}
		if it.text != "" {
			devices = append(devices, it)
		}
	}
	for _, l := range [][]item{buses, devices} {
		sort.SliceStable(l, func(i, j int) bool { return l[i].size > l[j].size || l[i].size != l[i].size })
		for i := 0; i < len(l) && i < 3; i++ {
			e.Worst = append(e.Worst, l[i].text)
		}
	}
	return e
}
