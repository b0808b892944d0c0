package devicetest

import (
	"math"
	"math/cmplx"

	"islet/solvers/facet"
)

// checkRotation turns the network frame: with v, pairs and angles turned by
// theta, flows and rates of pairs are turned, other rates and energies the same.
func checkRotation(t reporter, s *subject) {
	t.Helper()
	n := s.ports + s.own
	r := random()
	for _, b := range s.blocks(t) {
		for range points {
			time, v, x, ok := s.point(t, b, r)
			if !ok {
				return
			}
			theta := 2 * math.Pi * (r.Float64() - 0.5)
			turn := cmplx.Rect(1, theta)
			f, g := floats(n), floats(n)
			vTurned, xTurned := append(floats(0), v...), append(floats(0), x...)
			for k := 0; k < s.ports; k += 2 {
				put(vTurned[k:], turn*get(v[k:]))
			}
			for k, u := range s.d.Unknowns {
				switch u.Frame {
				case facet.PairD:
					put(xTurned[k:], turn*get(x[k:]))
				case facet.Angle:
					xTurned[k] += theta
				}
			}
			if s.eval(b, f, time, v, x) != nil || s.eval(b, g, time, vTurned, xTurned) != nil {
				continue
			}
			scale, err := s.rowScales(b, time, v, x)
			if err != nil {
				continue
			}
			wrong := false
			pair := func(k int) {
				want := turn * get(f[k:])
				if cmplx.Abs(get(g[k:])-want) > 1e-10*(scale[k]+scale[k+1]) {
					wrong = true
					t.Errorf("rotation by %.3f rad: pair (%s, %s): %v, want %v", theta, s.name(k), s.name(k+1), get(g[k:]), want)
				}
			}
			for k := 0; k < s.ports; k += 2 {
				pair(k)
			}
			for k, u := range s.d.Unknowns {
				row := s.ports + k
				switch u.Frame {
				case facet.PairD:
					pair(row)
				case facet.PairQ:
				default:
					if math.Abs(g[row]-f[row]) > 1e-10*scale[row] {
						wrong = true
						t.Errorf("rotation by %.3f rad: rate of %s: %v, want %v", theta, u.Name, g[row], f[row])
					}
				}
			}
			if a, ok := b.(facet.Accountable); ok {
				e, g := a.Energy(time, v, x), a.Energy(time, vTurned, xTurned)
				size := math.Abs(e.Supplied) + math.Abs(e.Dissipated) + s.power()
				if math.Abs(e.Stored-g.Stored) > 1e-10*math.Abs(e.Stored) ||
					math.Abs(e.Supplied-g.Supplied) > 1e-10*size || math.Abs(e.Dissipated-g.Dissipated) > 1e-10*size {
					wrong = true
					t.Errorf("rotation by %.3f rad: energy %+v, was %+v", theta, g, e)
				}
			}
			if wrong {
				return
			}
		}
	}
}

// power is a measure of the device's size, W: the largest current base among
// its unknowns times the largest voltage.
func (s *subject) power() float64 {
	var amperes, volts float64
	for _, u := range s.d.Unknowns {
		if u.Unit == "A" {
			amperes = max(amperes, u.Base)
		}
	}
	for _, v := range s.o.Voltages {
		volts = max(volts, v)
	}
	return amperes * volts
}

// checkFrameSpeed changes the speed of the network frame by dw. In a full
// model every pair x with mass M obeys M (x' + j w x) = ..., every angle
// d delta/dt = ... - w, every terminal capacitor flow = ... + j w C v; no other
// equation knows w.
func checkFrameSpeed(t reporter, s *subject) {
	t.Helper()
	if !s.first && s.level != "" || s.o.QuasiSteady {
		return
	}
	n := s.ports + s.own
	r := random()
	for _, b := range s.blocks(t) {
		for range points {
			time, v, x, ok := s.point(t, b, r)
			if !ok {
				return
			}
			dw := s.o.Frame * (r.Float64() - 0.5)
			f, g := floats(n), floats(n)
			err := s.eval(b, f, time, v, x)
			scale, scaleErr := s.rowScales(b, time, v, x)
			setFrame(b, s.o.Frame+dw)
			errTurned := s.eval(b, g, time, v, x)
			setFrame(b, s.o.Frame)
			if err != nil || scaleErr != nil || errTurned != nil {
				continue
			}
			want := append(floats(0), f...)
			for k := 0; k < s.ports; k += 2 {
				put(want[k:], get(f[k:])+complex(0, dw*s.portMass[k])*get(v[k:]))
			}
			for k, u := range s.d.Unknowns {
				row := s.ports + k
				switch u.Frame {
				case facet.PairD:
					put(want[row:], get(f[row:])-complex(0, dw*s.mass[k])*get(x[k:]))
				case facet.Angle:
					want[row] -= dw * s.mass[k]
				}
			}
			wrong := false
			for k := range n {
				if math.Abs(g[k]-want[k]) > 1e-10*(scale[k]+math.Abs(want[k])) {
					wrong = true
					t.Errorf("frame speed changed by %.4g rad/s: %s: flow or rate %.12g, want %.12g", dw, s.name(k), g[k], want[k])
				}
			}
			if wrong {
				return
			}
		}
	}
}
