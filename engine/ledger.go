package engine

import "math"

// EnergyBalance is the energy ledger of a run, J. Over any run
//
//	Supplied = Dissipated + Elsewhere + StoredChange + Destroyed + Mismatch
//
// and Mismatch, what is left, measures the run's accuracy.
type EnergyBalance struct {
	Supplied     float64 // by sources and inverter bridges
	Dissipated   float64 // in resistances and loads
	Elsewhere    float64 // taken at the terminals of devices that keep no account
	StoredChange float64 // in inductors and capacitors
	Destroyed    float64 // by switching an inductive or capacitive path at once
	Mismatch     float64
	Throughput   float64  // total of all supplies by magnitude, to measure Mismatch against
	LeftOut      []string // devices that keep no account
}

// Closure is |Mismatch| over Throughput; 0 where nothing flowed.
func (e EnergyBalance) Closure() float64 {
	if e.Throughput == 0 {
		return 0
	}
	return math.Abs(e.Mismatch) / e.Throughput
}

// ledger integrates powers over every step by Gauss's rule with three points
// on the dense output.
type ledger struct {
	m          *Simulation
	on         bool
	start      float64 // stored energy at the start
	supplied   float64
	dissipated float64
	elsewhere  float64
	destroyed  float64
	throughput float64
	y          []float64
	v, flow    []float64
	rate       []float64
}

func newLedger(m *Simulation) *ledger {
	l := &ledger{m: m, on: !m.opt.NoLedger}
	if !l.on {
		return l
	}
	l.y = make([]float64, m.net.Dim())
	ports, own := 0, 0
	for _, d := range m.sys.devices {
		ports, own = max(ports, d.ports), max(own, d.own)
	}
	l.v, l.flow, l.rate = make([]float64, ports), make([]float64, ports), make([]float64, own)
	l.start = l.stored(m.t, m.step.State())
	return l
}

// powers returns the totals at time t in state y.
func (l *ledger) powers(t float64, y []float64) (supplied, dissipated, elsewhere, throughput float64) {
	for _, d := range l.m.sys.devices {
		if d.off {
			continue
		}
		v := l.v[:d.ports]
		l.m.net.Ports(d.block, v, y)
		own := y[d.lo : d.lo+d.own]
		if d.account != nil {
			e := d.account.Energy(t, v, own)
			supplied += e.Supplied
			dissipated += e.Dissipated
			throughput += math.Abs(e.Supplied)
			continue
		}
		flow := l.flow[:d.ports]
		if err := d.dev.Eval(flow, l.rate[:d.own], t, v, own); err != nil {
			continue
		}
		p := 0.0
		for i, f := range flow {
			p += 1.5 * v[i] * f
		}
		elsewhere += p
		throughput += math.Abs(p)
	}
	return supplied, dissipated, elsewhere, throughput
}

// stored is the energy stored in state y.
func (l *ledger) stored(t float64, y []float64) float64 {
	if !l.on {
		return 0
	}
	sum := 0.0
	for _, d := range l.m.sys.devices {
		if d.off || d.account == nil {
			continue
		}
		v := l.v[:d.ports]
		l.m.net.Ports(d.block, v, y)
		sum += d.account.Energy(t, v, y[d.lo:d.lo+d.own]).Stored
	}
	return sum
}

func (l *ledger) step() {
	if !l.on {
		return
	}
	st := l.m.step
	h := st.Time() - st.Previous()
	x := math.Sqrt(0.6)
	nodes := [3]float64{0.5 * (1 - x), 0.5, 0.5 * (1 + x)}
	weights := [3]float64{5.0 / 18, 8.0 / 18, 5.0 / 18}
	for k, c := range nodes {
		t := st.Previous() + c*h
		st.Interpolate(l.y, nil, t)
		s, d, e, p := l.powers(t, l.y)
		w := weights[k] * h
		l.supplied += w * s
		l.dissipated += w * d
		l.elsewhere += w * e
		l.throughput += w * p
	}
}

// jump books the energy lost between the two sides of an event.
func (l *ledger) jump(before, t float64, after []float64) {
	if l.on {
		l.destroyed += before - l.stored(t, after)
	}
}

// Energy returns the ledger so far; zero if the run keeps none.
func (m *Simulation) Energy() EnergyBalance {
	l := m.ledger
	if !l.on {
		return EnergyBalance{}
	}
	e := EnergyBalance{
		Supplied:     l.supplied,
		Dissipated:   l.dissipated,
		Elsewhere:    l.elsewhere,
		Destroyed:    l.destroyed,
		Throughput:   l.throughput,
		StoredChange: l.stored(m.t, m.step.State()) - l.start,
	}
	e.Mismatch = e.Supplied - e.Dissipated - e.Elsewhere - e.StoredChange - e.Destroyed
	for _, d := range m.sys.devices {
		if d.account == nil {
			e.LeftOut = append(e.LeftOut, d.name)
		}
	}
	return e
}
