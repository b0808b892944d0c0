package devicetest

import (
	"math"
	"math/cmplx"
	"strings"

	"islet/solvers/facet"
)

// checkMeasure checks that channels are finite and that those with reserved
// names (p, q, i, and p_from, ... with the name of a terminal) are the powers
// and currents of the flows; the speed of a Former must be what moves its angle.
func checkMeasure(t reporter, s *subject) {
	t.Helper()
	m, measures := s.b.(facet.Measurer)
	former, forms := s.b.(facet.Former)
	var channels []facet.Channel
	if measures {
		channels = m.Channels()
	}
	r := random()
	for range points {
		time, v, x, ok := s.point(t, s.b, r)
		if !ok {
			return
		}
		f := floats(s.ports + s.own)
		if s.eval(s.b, f, time, v, x) != nil {
			continue
		}
		scale, err := s.rowScales(s.b, time, v, x)
		if err != nil {
			continue
		}
		got := floats(len(channels))
		for k := range got {
			got[k] = math.NaN()
		}
		if measures {
			m.Measure(got, time, v, x)
		}
		wrong := false
		for k, c := range channels {
			if math.IsNaN(got[k]) || math.IsInf(got[k], 0) {
				wrong = true
				t.Errorf("channel %q: %v, or not written", c.Name, got[k])
				continue
			}
			name, suffix, _ := strings.Cut(c.Name, "_")
			terminal := 0
			if suffix != "" {
				terminal = -1
				for l, term := range s.d.Terminals {
					if term.Name == suffix {
						terminal = l
					}
				}
			}
			if terminal < 0 || len(name) != 1 || !strings.Contains("pqi", name) {
				continue
			}
			volts, amperes := get(v[2*terminal:]), get(f[2*terminal:])
			power := 1.5 * volts * cmplx.Conj(amperes)
			small := scale[2*terminal] + scale[2*terminal+1]
			var want float64
			var in, out string
			switch name {
			case "p":
				want, in, out, small = real(power), "W in", "W generated", small*1.5*cmplx.Abs(volts)
			case "q":
				want, in, out, small = imag(power), "var in", "var generated", small*1.5*cmplx.Abs(volts)
			case "i":
				want, in = cmplx.Abs(amperes)/math.Sqrt2, "A rms"
			}
			switch c.Unit {
			case in:
			case out:
				want = -want
			default:
				wrong = true
				t.Errorf("channel %q: unit %q: want %q%s", c.Name, c.Unit, in, map[bool]string{true: " or \"" + out + "\""}[out != ""])
				continue
			}
			if math.Abs(got[k]-want) > 1e-10*small {
				wrong = true
				t.Errorf("channel %q: %.12g %s, the flow gives %.12g", c.Name, got[k], c.Unit, want)
			}
		}
		if forms {
			speed := former.Speed(time, v, x)
			k := former.AngleUnknown()
			want := s.mass[k] * (speed - s.o.Frame)
			if math.Abs(f[s.ports+k]-want) > 1e-12*s.mass[k]*(math.Abs(speed)+s.o.Frame) && s.mass[k] > 0 {
				wrong = true
				t.Errorf("Speed: %.12g rad/s, but the angle's rate is %.12g with a frame at %.12g rad/s", speed, f[s.ports+k], s.o.Frame)
			}
			for l, c := range channels {
				if hertz := speed / (2 * math.Pi); c.Name == "frequency" && math.Abs(got[l]-hertz) > 1e-12*math.Abs(hertz) {
					wrong = true
					t.Errorf("channel %q: %.12g Hz, Speed gives %.12g", c.Name, got[l], hertz)
				}
			}
		}
		if wrong {
			return
		}
	}
}
