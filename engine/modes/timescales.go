package modes

import (
	"fmt"
	"math"
	"math/cmplx"
	"sort"
)

// Timescale is a group of modes that lie close together in magnitude, far from
// the next.
type Timescale struct {
	Slowest    float64 `json:"slowest_1/s"` // magnitude
	Fastest    float64 `json:"fastest_1/s"`
	Modes      []int   `json:"modes"`    // numbers, slowest first
	ByDynamics []Share `json:"dynamics"` // mean over the modes
}

// timescales groups the modes by gaps in magnitude.
func (rep *Report) timescales(gap float64) {
	var order []int
	for i := range rep.Modes {
		if m := &rep.Modes[i]; !m.Zero && !m.Neutral {
			order = append(order, i)
		}
	}
	size := func(i int) float64 { return cmplx.Abs(rep.Modes[i].Value) }
	sort.SliceStable(order, func(a, b int) bool { return size(order[a]) < size(order[b]) })
	rep.Timescales = nil
	for k, i := range order {
		if k == 0 || size(i) > gap*size(order[k-1]) {
			rep.Timescales = append(rep.Timescales, Timescale{Slowest: size(i)})
		}
		t := &rep.Timescales[len(rep.Timescales)-1]
		t.Fastest = size(i)
		t.Modes = append(t.Modes, rep.Modes[i].Number)
	}
	for k := range rep.Timescales {
		t := &rep.Timescales[k]
		sum := newTally()
		for _, number := range t.Modes {
			for _, s := range rep.Modes[number-1].ByDynamics {
				sum.add(s.Name, s.Value/float64(len(t.Modes)))
			}
		}
		t.ByDynamics = sum.largest()
	}
}

// Separation steers Propose. The zero value gives the stated defaults.
type Separation struct {
	// Factor is how much faster than the bandwidth a mode must be for what
	// takes part in it to be dropped, >= 1; 0 means 5 (common practice, no
	// source).
	Factor float64
	// Tolerated is the participation a dropped group may have in a slower
	// mode, between 0 and 1; 0 means 0.05 (common practice, no source).
	Tolerated float64
}

// Proposal tells of a group of dynamics whether singular perturbation may drop
// it, that is put it to its quasi-steady state.
type Proposal struct {
	Dynamics string
	Drop     bool
	// Slowest is the magnitude of the slowest mode in which the group has
	// more than the tolerated share, 1/s, and Mode its number; 0 if there is
	// none.
	Slowest float64
	Mode    int
	// Share is the group's largest share in a mode too slow to drop, and Of
	// that mode's number; 0 if there is none.
	Share  float64
	Of     int
	Reason string
}

// Propose tells for every group of dynamics whether all its participation is
// in modes faster than a factor times the bandwidth, rad/s. It judges by
// participation alone: to drop a fast group can still move a slow mode's
// damping (network dynamics of droop-controlled grids are the known case: P.
// Vorobev et al., "High-fidelity model order reduction for microgrids
// stability assessment", IEEE Trans. Power Systems 33(1), 2018), which [Match]
// shows. The error tells of a report without all modes, or of values out of
// range.
func (rep *Report) Propose(bandwidth float64, o Separation) ([]Proposal, error) {
	if o.Factor == 0 {
		o.Factor = 5
	}
	if o.Tolerated == 0 {
		o.Tolerated = 0.05
	}
	if !rep.All {
		return nil, fmt.Errorf("modes: a proposal needs all modes, the report holds %d near its shifts", len(rep.Modes))
	}
	if !(bandwidth > 0) || math.IsInf(bandwidth, 0) || !(o.Factor >= 1) || math.IsInf(o.Factor, 0) || !(o.Tolerated > 0 && o.Tolerated < 1) {
		return nil, fmt.Errorf("modes: bandwidth is %g rad/s, factor %g, tolerated share %g; want a positive bandwidth, a factor from 1 on and a share between 0 and 1", bandwidth, o.Factor, o.Tolerated)
	}
	limit := o.Factor * bandwidth
	var list []Proposal
	at := make(map[string]int)
	for _, u := range rep.States {
		if _, ok := at[u.Dynamics]; !ok && u.Dynamics != "" {
			at[u.Dynamics] = len(list)
			list = append(list, Proposal{Dynamics: u.Dynamics})
		}
	}
	for i := range rep.Modes {
		m := &rep.Modes[i]
		size := cmplx.Abs(m.Value)
		for _, s := range m.ByDynamics {
			k, ok := at[s.Name]
			if !ok {
				continue
			}
			p := &list[k]
			if size < limit && s.Value > p.Share {
				p.Share, p.Of = s.Value, m.Number
			}
			if s.Value > o.Tolerated && !m.Zero && !m.Neutral && (p.Mode == 0 || size < p.Slowest) {
				p.Slowest, p.Mode = size, m.Number
			}
		}
	}
	for k := range list {
		p := &list[k]
		p.Drop = p.Share <= o.Tolerated
		switch {
		case p.Drop && p.Mode > 0:
			p.Reason = fmt.Sprintf("takes part in modes from %.4g 1/s on, %.3g times the bandwidth", p.Slowest, p.Slowest/bandwidth)
		case p.Drop:
			p.Reason = fmt.Sprintf("takes part in no mode by more than %.3g %%", 100*o.Tolerated)
		default:
			p.Reason = fmt.Sprintf("has %.3g %% of mode %d at %.4g 1/s, slower than %.4g 1/s", 100*p.Share, p.Of, cmplx.Abs(rep.Modes[p.Of-1].Value), limit)
		}
	}
	return list, nil
}

// Droppable lists the groups that a proposal drops.
func Droppable(list []Proposal) []string {
	var names []string
	for _, p := range list {
		if p.Drop {
			names = append(names, p.Dynamics)
		}
	}
	return names
}
