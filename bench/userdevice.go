package bench

import (
	"math/cmplx"

	"islet/devices"
	"islet/solvers/facet"
)

// plainDroop is a droop inverter as a user would write one in an afternoon: the
// equations of [devices.GridForming] with [devices.Droop], without limits, in
// complex numbers, with no Jacobian and none of the facets that make shipped
// devices fast. It shows what an own device costs.
type plainDroop struct {
	p     devices.GridFormingParams
	droop devices.Droop
	frame float64
}

func newPlainDroop(p devices.GridFormingParams) *plainDroop {
	return &plainDroop{p: p, droop: p.Primary.(devices.Droop)}
}

func (d *plainDroop) Describe() facet.Description {
	v, i := d.p.V0, d.p.Rating/(1.5*d.p.V0)
	pair := func(name, unit string, base float64, frames ...facet.Frame) []facet.Unknown {
		return []facet.Unknown{{Name: name + ".d", Unit: unit, Base: base, Frame: frames[0]}, {Name: name + ".q", Unit: unit, Base: base, Frame: frames[1]}}
	}
	u := []facet.Unknown{
		{Name: "delta", Unit: "rad", Base: 1, Frame: facet.Angle},
		{Name: "P", Unit: "W", Base: d.p.Rating},
		{Name: "Q", Unit: "var", Base: d.p.Rating},
	}
	own := []facet.Frame{facet.Invariant, facet.Invariant}
	u = append(u, pair("phi", "V s", i/d.p.Kiv, own...)...)
	u = append(u, pair("gamma", "A s", v/d.p.Kic, own...)...)
	u = append(u, pair("i_f", "A", i, own...)...)
	u = append(u, pair("v_c", "V", v, own...)...)
	u = append(u, pair("i_g", "A", i, facet.PairD, facet.PairQ)...)
	return facet.Description{
		Kind:      "plain droop inverter",
		Terminals: []facet.Terminal{{Name: "ac", Flow: facet.FlowState}},
		Unknowns:  u,
	}
}

func (d *plainDroop) Dims() (ports, own int) { return 2, 13 }

func (d *plainDroop) Mass(port, own []float64) {
	clear(port)
	f := d.p.Filter
	copy(own, []float64{1, 1, 1, 1, 1, 1, 1, f.Lf, f.Lf, f.Cf, f.Cf, f.Lg, f.Lg})
}

func (d *plainDroop) SetFrame(speed float64) { d.frame = speed }

func (d *plainDroop) Eval(flow, rate []float64, t float64, v, x []float64) error {
	at := func(k int) complex128 { return complex(x[k], x[k+1]) }
	put := func(k int, z complex128) { rate[k], rate[k+1] = real(z), imag(z) }
	c := func(r float64) complex128 { return complex(r, 0) }
	p, f := &d.p, &d.p.Filter
	e := cmplx.Rect(1, x[0])
	phi, gamma, iF, vC, iNet := at(3), at(5), at(7), at(9), at(11)
	iG := cmplx.Conj(e) * iNet
	s := 1.5 * vC * cmplx.Conj(iG)
	omega := p.Omega0 - d.droop.M*(x[1]-p.P)
	volts := p.V0 - d.droop.N*(x[2]-p.Q)
	rate[0] = omega - d.frame
	rate[1] = d.droop.OmegaC * (real(s) - x[1])
	rate[2] = d.droop.OmegaC * (imag(s) - x[2])
	miss := c(volts) - complex(p.Rv, p.Xv)*iG - vC
	ref := c(p.Kpv)*miss + c(p.Kiv)*phi + c(p.F)*iG + complex(0, p.Omega0*f.Cf)*vC
	put(3, miss)
	put(5, ref-iF)
	vI := c(p.Kpc)*(ref-iF) + c(p.Kic)*gamma + complex(0, p.Omega0*f.Lf)*iF
	put(7, vI-vC-complex(f.Rf, omega*f.Lf)*iF)
	put(9, iF-iG-complex(0, omega*f.Cf)*vC)
	put(11, e*vC-complex(v[0], v[1])-complex(f.Rg, d.frame*f.Lg)*iNet)
	flow[0], flow[1] = -x[11], -x[12]
	return nil
}

// Guess starts the search for the operating point at rated voltage and the
// power set.
func (d *plainDroop) Guess(x []float64, t float64, v []float64) {
	p, f := &d.p, &d.p.Filter
	bus := complex(v[0], v[1])
	iNet := cmplx.Conj(complex(p.P, p.Q) / (1.5 * bus))
	vNet := bus + complex(f.Rg, p.Omega0*f.Lg)*iNet
	x[0] = cmplx.Phase(vNet)
	e := cmplx.Rect(1, -x[0])
	iG, vC := e*iNet, e*vNet
	iF := iG + complex(0, p.Omega0*f.Cf)*vC
	put := func(k int, z complex128) { x[k], x[k+1] = real(z), imag(z) }
	x[1], x[2] = p.P, p.Q
	put(3, (iF-complex(p.F, 0)*iG-complex(0, p.Omega0*f.Cf)*vC)/complex(p.Kiv, 0))
	put(5, (vC+complex(f.Rf, 0)*iF)/complex(p.Kic, 0))
	put(7, iF)
	put(9, vC)
	put(11, iNet)
}

func (d *plainDroop) AngleUnknown() int { return 0 }

func (d *plainDroop) Speed(t float64, v, x []float64) float64 {
	return d.p.Omega0 - d.droop.M*(x[1]-d.p.P)
}

func (d *plainDroop) Weight() float64 { return d.p.Rating }
